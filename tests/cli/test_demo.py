"""The demo's second week: what went otherwise than planned is put right, and then fits find the truth."""

from __future__ import annotations

import io
import json
import re
from datetime import datetime
from pathlib import Path
from typing import Any

import pytest

from nightfold.fits.estimate import Estimate
from nightfold.opening import open_store
from nightfold.simulator import Mishap
from nightfold.simulator.evening import run_nights
from nightfold_cli.demo.mendedtext import show_mended
from nightfold_cli.demo.mending import HAPPENED, Mended
from nightfold_cli.demo.truths import Found
from nightfold_cli.main import main
from nightfold_cli.render import Screen

Document = dict[str, Any]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("demo") / "heron"


@pytest.fixture(scope="module")
def document(folder: Path) -> Document:
    """Return what ``demo --nights 10 --json`` says."""
    with pytest.MonkeyPatch.context() as patch, folder.parent.joinpath("out").open("w") as out:
        patch.setattr("sys.stdout", out)
        assert main(["demo", str(folder), "--nights", "10", "--json"]) == 0
    answer: Document = json.loads(folder.parent.joinpath("out").read_text(encoding="utf-8"))
    return answer


def mishap_of(kind: str) -> Mishap:
    """Return a mishap as the simulator states it."""
    return next(
        mishap for night in run_nights(39, 8, None) for mishap in night.mishaps if mishap.kind == kind
    )


def mishap(document: Document, kind: str) -> Document:
    (found,) = (item for item in document["mishaps"] if item["kind"] == kind)
    return dict(found)


def test_nothing_is_refused(document: Document) -> None:
    assert document["refused"] == 0
    assert document["new"] == document["shots"]
    assert document["amended"] > 100


def test_every_mishap_is_put_right_and_its_truth_found(document: Document) -> None:
    assert {item["kind"] for item in document["mishaps"]} == set(HAPPENED)
    for item in document["mishaps"]:
        assert item["done"]
        for truth in item["truths"]:
            assert truth["problem"] is None
            assert truth["trusted"]
            assert abs(truth["value"] - truth["truth"]) < 3.5 * truth["stderr"], truth["what"]


@pytest.mark.parametrize("kind", ["misrecorded", "reanalysed"])
def test_without_anything_done_the_number_is_far_off(document: Document, kind: str) -> None:
    (truth,) = mishap(document, kind)["truths"]
    without = truth["without"]
    assert abs(without["value"] - truth["truth"]) > 10 * without["stderr"]


def test_corrections_keep_what_was_recorded(document: Document, folder: Path) -> None:
    with open_store(folder / "heron.sqlite") as store:
        table = store.shots(["coil_current"], scan="loss-range", set_aside=True)
        assert table["coil_current"].between(60.1, 62.7).all()
        events = store.history(table["uid"][0]).events
        (corrected,) = (event for event in events if event.kind == "corrected")
        assert (corrected.what, corrected.by) == ("coil_current", "demo")
        assert corrected.old == pytest.approx(corrected.new * 100 / 120, abs=1e-3)


def test_a_new_step_is_found_to_the_shot(document: Document) -> None:
    (version,) = document["versions"]
    assert version["versions"] == 2
    assert version["truth"]["step"] == "settle"
    assert datetime.fromisoformat(version["found"]) == datetime.fromisoformat(version["truth"]["at"])


def test_the_week_after_next_is_not_told_of(document: Document) -> None:
    assert document["sensors"] == []
    assert document["readings"] > 3 * 11 * 1440
    assert all(abs(truth["value"] - truth["truth"]) < 4 * truth["stderr"] for truth in document["truths"])


@pytest.mark.parametrize("width", [80, 120])
def test_the_table_of_mishaps_fits_the_screen(width: int) -> None:
    (truth,) = mishap_of("reanalysed").truths
    wrong = Found(truth, "dense-again#1", Estimate(0.00235, 0.000086, "1/ms"), True)
    right = Found(truth, "dense-again#1", Estimate(0.00421, 0.00017, "1/ms"), True)
    nothing = Found(truth, None, None, False, "no such scan was found")
    out = io.StringIO()
    screen = Screen(out, io.StringIO(), "terminal", width)
    show_mended(
        screen,
        [
            Mended(mishap_of("reanalysed"), "48 shots amended, 1 fit done again", (wrong,), (right,)),
            Mended(mishap_of("resumed"), "nothing", (None,), (nothing,)),
        ],
    )
    lines = re.sub(r"\x1b\[[0-9;]*m", "", out.getvalue()).splitlines()
    assert max(map(len, lines)) <= width
    assert any("0.00415" in line and "0.00421(17)" in line and " yes" in line for line in lines)
    assert any("0.002350(86)" in line for line in lines) == (width == 120)
    assert any(line.endswith("no such") or "no such scan" in line for line in lines)
