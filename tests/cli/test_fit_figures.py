"""Figures, comparison of models and maps of slices by ``nightfold fit``."""

from __future__ import annotations

import json
from collections.abc import Callable
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pytest

Show = Callable[..., str]


@pytest.fixture
def where(heron: Path) -> Path:
    return heron / "heron.sqlite"


@pytest.mark.parametrize("kind", ["png", "svg", "pdf"])
def test_a_figure_is_written(where: Path, run: Any, at_home: Path, kind: str) -> None:
    answer = run(
        "--store", where, "fit", "loss-coarse", "lorentzian", "--no-keep", "--figure", f"a.{kind}", "--json"
    )
    assert answer.code == 0, answer.err
    assert json.loads(answer.out)["figures"] == [f"a.{kind}"]
    assert [path.name for path in at_home.iterdir()] == [f"a.{kind}"]
    if kind == "svg":
        text = (at_home / "a.svg").read_text("utf-8")
        for words in (
            "loss-coarse#1 lorentzian",
            "heron, night of 2026-09-28; atom_number along",
            "set aside (1)",
        ):
            assert words in text.replace("  ", " ")


def test_several_models_make_several_figures(where: Path, run: Any, at_home: Path) -> None:
    fit = ("--store", where, "fit", "loss-coarse", "lorentzian", "gaussian", "--no-keep")
    answer = run(*fit, "--figure", "a.svg")
    assert answer.code == 0, answer.err
    assert sorted(path.name for path in at_home.iterdir()) == ["a-gaussian.svg", "a-lorentzian.svg"]


def test_slices_make_a_map(where: Path, run: Any, at_home: Path) -> None:
    fit = ("--store", where, "fit", "evaporation-map", "saturation", "--along", "evaporate#3.end_power")
    assert run(*fit, "--no-keep", "--figure", "m.svg", "--estimate", "amplitude").code == 0
    text = (at_home / "m.svg").read_text("utf-8")
    assert "saturation: amplitude" in text.replace("  ", " ")
    assert "evaporate#3.duration (s)" in text


@pytest.mark.parametrize(
    ("file", "said"), [("a.jpg", "wanted a file NAME.png"), ("none/a.png", "in a folder that is there")]
)
def test_a_bad_file_is_refused_before_anything_is_fitted(where: Path, run: Any, file: str, said: str) -> None:
    answer = run("--store", where, "fit", "loss-coarse", "lorentzian", "--figure", file)
    assert answer.code == 2
    assert said in answer.err
    assert not json.loads(run("--store", where, "fits", "loss-coarse", "--json").out)["fits"]


def test_models_stand_side_by_side(where: Path, on_screen: Show) -> None:
    fit = ("--store", where, "fit", "loss-coarse", "lorentzian", "gaussian", "--no-keep")
    lines = on_screen(*fit).split("\n")
    at = next(row for row, line in enumerate(lines) if line.startswith("models side by side"))
    assert lines[at].endswith("by AICc of 61 shots")
    assert lines[at + 2].split() == ["model", "weight", "ΔAICc", "free", "center", "trust"]
    assert lines[at + 3].split()[0] == "lorentzian"
    text = " ".join(lines[at + 5 :])
    assert "center over all models: 61.3" in text
    assert ")(" in text
    assert max(map(len, lines[1:])) <= 80


def test_the_comparison_in_json(where: Path, run: Any) -> None:
    fit = ("--store", where, "fit", "loss-coarse", "lorentzian", "gaussian", "--no-keep", "--json")
    answer = json.loads(run(*fit).out)
    (found,) = answer["comparison"]
    values = [fit["estimates"]["center"]["value"] for fit in answer["fits"]]
    assert [each["value"] for each in found["models"]] == values
    assert sum(each["weight"] for each in found["models"]) == pytest.approx(1)
    assert found["spread"] == pytest.approx(abs(values[0] - values[1]))
    assert min(values) <= found["combined"]["value"] <= max(values)
    assert set(found["combined"]) == {"value", "stderr", "model_stderr", "unit", "trusted"}
    alone = json.loads(run("--store", where, "fit", "loss-coarse", "lorentzian", "--no-keep", "--json").out)
    assert (alone["comparison"], alone["figures"]) == ([], [])


def test_models_with_nothing_in_common_say_so(where: Path, on_screen: Show) -> None:
    text = on_screen("--store", where, "fit", "lifetime", "exponential", "two-body", "--no-keep")
    assert "no position or rate in common" in " ".join(text.split())
    text = on_screen(
        "--store", where, "fit", "lifetime", "exponential", "two-body", "--no-keep", "--estimate", "amplitude"
    )
    assert "amplitude over all models" in text


def test_slices_have_a_chart(where: Path, on_screen: Show) -> None:
    fit = ("--store", where, "fit", "evaporation-map", "saturation", "--along", "evaporate#3.end_power")
    text = on_screen(*fit, "--no-keep", "--estimate", "amplitude")
    assert "amplitude (" in text
    assert "│ its 68 % interval" in text
    assert max(map(len, text.split("\n")[1:])) <= 80


def test_three_axes_have_a_map_for_each_setting_of_the_shortest(
    run: Any, on_screen: Show, at_home: Path
) -> None:
    rng, lines = np.random.default_rng(4), list[str]()
    for beam, hold, power in product(("x", "y"), (10.0, 20.0, 40.0), (1.0, 2.0, 5.0)):
        depth = 0 if (beam, hold, power) == ("y", 20.0, 2.0) else 5e4
        for current in rng.permutation(np.linspace(59.5, 63, 13)):
            number = 1e5 - depth / (1 + (2 * (current - 61 - hold / 100) / 0.9) ** 2) + 300 * rng.normal()
            seconds = 10 * len(lines)
            record = {
                "machine": "heron",
                "started": f"2026-10-05T{20 + seconds // 3600}:{seconds // 60 % 60:02d}:{seconds % 60:02d}Z",
                "sequence": "hold",
                "scan": "cube",
                "swept": ["current", "hold", "power", "beam"],
                "parameters": {"current": float(current), "hold": hold, "power": power, "beam": beam},
                "observables": {"atom_number": float(number)},
            }
            lines.append(json.dumps(record))
    Path("cube.jsonl").write_text("\n".join(lines), encoding="utf-8")
    for first in (("new",), ("take", "cube.jsonl")):
        assert run("--store", "cube.sqlite", *first).code == 0
    words = ("--store", "cube.sqlite", "fit", "cube", "lorentzian", "--along", "current", "--plain")
    fits = json.loads(run(*words, "--json").out)["fits"]
    text = on_screen(*words)
    shown = text.split("\n")
    heads = [row for row, line in enumerate(shown) if line.startswith("center") and "beam" in line]
    assert [shown[row] for row in heads] == ["center  beam x", "center  beam y"]
    maps = [[line.partition("|")[2][:6] for line in shown[row + 2 : row + 5]] for row in heads]
    for beam, rows in zip("xy", maps, strict=True):
        for power, row in zip((5.0, 2.0, 1.0), rows, strict=True):
            for place, hold in enumerate((10.0, 20.0, 40.0)):
                where = {"hold": hold, "power": power, "beam": beam}
                (trusted,) = (fit["trusted"] for fit in fits if fit["slice"] == where)
                assert (row[2 * place : 2 * place + 2] == "××") is not trusted
    assert not any(
        fit["trusted"] for fit in fits if fit["slice"] == {"hold": 20.0, "power": 2.0, "beam": "y"}
    )
    assert "×× not to be trusted" in text


def test_an_estimate_that_no_model_has(where: Path, run: Any) -> None:
    fit = (
        "--store",
        where,
        "fit",
        "loss-coarse",
        "lorentzian",
        "gaussian",
        "--no-keep",
        "--estimate",
        "rate",
    )
    answer = run(*fit)
    assert answer.code == 3
    assert "no estimate 'rate'" in answer.err
    again = run("--store", where, "fit", "--again", "--figure", "a.png")
    assert again.code == 2
    assert "--figure is for new ones" in again.err
