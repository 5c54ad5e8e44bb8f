"""Derived quantities on the command line."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from nightfold import open_store

Run = Callable[..., Any]

CARD = """\
machine = "heron"
zone = "Europe/Vienna"
[parameters.aom_frequency]
unit = "MHz"
[observables.atom_number]
unit = "atoms"
[derived.detuning]
expression = "2*aom_frequency - 160 MHz"
[derived.polarisation]
expression = "(atom_number[up] - atom_number[down]) / (atom_number[up] + atom_number[down])"
"""


def record(k: int) -> dict[str, Any]:
    return {
        "uid": f"shot-{k}",
        "machine": "heron",
        "sequence": "image",
        "scan": "line",
        "swept": ["detuning"],
        "started": f"2026-10-05T20:00:{k:02d}Z",
        "parameters": {"aom_frequency": 78 + k / 4},
        "observables": {
            "atom_number[up]": {"value": 6e4, "stderr": 600},
            "atom_number[down]": {"value": 3e4, "stderr": 300},
        },
    }


@pytest.fixture
def filled(at_home: Path) -> Path:
    (at_home / "heron.toml").write_text(CARD, encoding="utf-8")
    with open_store(at_home / "nightfold.sqlite", create=True) as store:
        store.use_card(at_home / "heron.toml")
        store.take([record(k) for k in range(17)])
        (at_home / "heron.toml").write_text(CARD.replace("160", "159"), encoding="utf-8")
        store.use_card(at_home / "heron.toml")
    return at_home


def answer(run: Run, *arguments: str) -> dict[str, Any]:
    done = run(*arguments, "--json")
    assert done.code == 0, done.err
    decoded: dict[str, Any] = json.loads(done.out)
    assert decoded.pop("schema") == 1
    return decoded


def test_the_expressions_in_force_and_all(filled: Path, run: Run) -> None:
    now = answer(run, "derived")["derived"]
    assert [(row["name"], row["of"], row["unit"], row["version"], row["in_force"]) for row in now] == [
        ("detuning", "parameter", "MHz", "2", True),
        ("polarisation", "observable", None, "1", True),
    ]
    assert [row["version"] for row in answer(run, "derived", "--all")["derived"]] == ["1", "2", "1"]
    assert run("derived", "--machine", "crane").code == 3
    lines = [line.split("\t") for line in run("derived").out.splitlines()]
    assert lines[0] == ["name", "expression", "unit", "of", "version", "since"]
    assert lines[1][:4] == ["detuning", "2*aom_frequency - 159 MHz", "MHz", "parameter"]


@pytest.mark.parametrize("width", [60, 80, 120])
def test_on_a_screen(filled: Path, on_screen: Callable[..., str], width: int) -> None:
    shown = on_screen("derived", "--all", width=width)
    assert "2*aom_frequency - 160 MHz" in shown
    assert max(map(len, shown.splitlines()[1:])) <= width
    shot = on_screen("shots", "shot-4", width=width)
    assert max(map(len, shot.splitlines()[1:])) <= width
    assert "0.3333(63)" in shot
    assert "2*aom_frequency - 159 MHz" in shot


def test_a_store_without_any_says_how_to_make_one(at_home: Path, on_screen: Callable[..., str]) -> None:
    open_store(at_home / "nightfold.sqlite", create=True).close()
    assert "[derived.NAME] in the machine card makes one" in on_screen("derived")


def test_a_shot_its_columns_and_its_scan(filled: Path, run: Run) -> None:
    shot = answer(run, "shots", "shot-4")["shot"]
    assert shot["parameters"]["detuning"] == {
        "value": -1.0, "unit": "MHz", "swept": True, "corrected": False, "derived": "2*aom_frequency - 159 MHz",
    }  # fmt: skip
    assert shot["parameters"]["aom_frequency"]["derived"] is None
    assert shot["observables"]["polarisation"]["value"] == pytest.approx(1 / 3)
    shots = answer(run, "shots", "-p", "detuning", "-o", "polarisation", "--limit", "1")
    assert shots["units"] == {"detuning": "MHz", "polarisation": ""}
    assert shots["shots"][0]["detuning"] == 5.0
    axis = answer(run, "scans")["scans"][0]["axes"][0]
    assert (axis["parameter"], axis["unit"], axis["low"], axis["high"]) == ("detuning", "MHz", -3.0, 5.0)


def test_a_kept_fit_tells_the_version(filled: Path, run: Run) -> None:
    assert run("fit", "line", "gaussian", "-o", "polarisation").code == 0
    (kept,) = answer(run, "fits")["fits"]
    assert kept["settings"]["derived"] == {"detuning": "2", "polarisation": "1"}


def test_a_bad_expression_is_refused_with_its_line(filled: Path, run: Run) -> None:
    (filled / "bad.toml").write_text(CARD.replace("160 MHz", "160 ms"), encoding="utf-8")
    (filled / "more.jsonl").write_text(json.dumps(record(30)), encoding="utf-8")
    done = run("take", "more.jsonl", "--card", "bad.toml")
    assert done.code == 5
    assert "bad.toml:8: derived.detuning.expression: found 2 * aom_frequency (MHz) - 160 ms (ms)" in done.err
    assert len(answer(run, "shots")["shots"]) == 17
