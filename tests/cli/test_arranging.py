from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold import open_store

Run = Callable[..., Any]
REASON = "broken off when the laser lost its lock, and taken up again two days later"


@pytest.fixture
def rounds(at_home: Path) -> Path:
    """Return a store with two rounds of a label: one in order, one shuffled."""
    where = at_home / "rounds.sqlite"
    with open_store(where, create=True) as store:
        for day, order in ((5, np.arange(9)), (7, np.random.default_rng(1).permutation(9))):
            store.take(
                {
                    "machine": "heron",
                    "started": f"2026-10-{day:02d}T20:{k:02d}:00+00:00",
                    "uid": f"{day}-{k}-shot",
                    "sequence": "hold-in-trap",
                    "scan": "loss",
                    "swept": ["coil_current"],
                    "parameters": {"coil_current": {"value": 60 + 0.25 * float(place), "unit": "A"}},
                    "observables": {"atom_number": 1e5 + place},
                }
                for k, place in enumerate(order)
            )
    return where


def answered(run: Run, *words: str | Path) -> dict[str, Any]:
    answer = run(*words, "--json")
    assert answer.code == 0, answer.err
    document: dict[str, Any] = json.loads(answer.out)
    assert document["schema"] == 1
    return document


def test_join_list_and_undo(rounds: Path, run: Run) -> None:
    joined = answered(run, "--store", rounds, "join", "loss#1", "loss#2", "--reason", REASON, "--by", "ida")
    assert (joined["scan"]["key"], joined["scan"]["shots"], joined["scan"]["arranged"]) == ("loss#1", 18, [1])
    made = joined["arrangement"]
    assert (made["number"], made["kind"], made["by"], made["reason"], made["undone"]) == (
        1,
        "join",
        "ida",
        REASON,
        None,
    )
    assert (made["before"], made["after"]) == (["loss#1", "loss#2"], ["loss#1"])
    assert answered(run, "--store", rounds, "split", "--list")["arrangements"] == [made]
    undone = answered(run, "--store", rounds, "join", "--undo", "1", "--by", "leo")["undone"]
    assert (undone["undone_by"], undone["before"], undone["after"]) == (
        "leo",
        ["loss#1", "loss#2"],
        ["loss#1"],
    )
    listed = answered(run, "--store", rounds, "join", "--list")["arrangements"][0]
    assert (listed["before"], listed["after"], listed["shots"]) == (
        made["before"],
        made["after"],
        made["shots"],
    )
    assert [scan["arranged"] for scan in answered(run, "--store", rounds, "scans")["scans"]] == [[], []]
    assert run("--store", rounds, "join", "--undo", "1").code == 2


def test_split(rounds: Path, run: Run) -> None:
    split = answered(run, "--store", rounds, "split", "loss#1", "--after", "4")
    assert [(scan["key"], scan["shots"]) for scan in split["scans"]] == [("loss#1", 4), ("loss#3", 5)]
    assert answered(run, "--store", rounds, "split", "--undo", "1")["undone"]["before"] == ["loss#1"]
    at_shot = answered(run, "--store", rounds, "split", "loss#1", "--at", "5-3-")
    assert [scan["shots"] for scan in at_shot["scans"]] == [3, 6]


@pytest.mark.parametrize("width", [80, 120])
def test_screens(rounds: Path, on_screen: Callable[..., str], width: int) -> None:
    def screen(*words: str) -> str:
        text = on_screen("--store", rounds, *words, width=width)
        assert max(map(len, text.split("\n")[1:])) <= width
        return text

    assert "nothing was joined or split by hand" in screen("join", "--list")
    assert "60…62 A ↑" in screen("scans")
    assert "↑ ↓ taken in this order: a drift in time would look like a feature" in screen("scans")
    assert "in order of rising coil_current: drift would look like a feature" in " ".join(
        screen("scan", "loss#1").split()
    )
    assert "in order of" not in screen("scan", "loss#2")
    text = screen("join", "loss#1", "loss#2", "--reason", REASON, "--by", "ida")
    assert (
        "joined loss#1 and loss#2 into loss#1, now 18 shots\n'nightfold join --undo 1' takes it back" in text
    )
    header = " ".join(screen("scan", "loss").split())
    assert "by hand joined loss#1 and loss#2 into loss#1, 20" in header
    assert f"UTC by ida: {REASON}; 'nightfold join --undo 1' takes it back" in header
    assert "split loss#1 into loss#1 and loss#3, with 10 shots and 8 shots" in screen(
        "split", "loss", "--after", "10"
    )
    listed = " ".join(screen("split", "--list").split())
    assert "18" in listed
    assert "ida" in listed
    assert "split 2 undone: 18 shots back in loss#1" in screen("split", "--undo", "2")


@pytest.mark.parametrize(
    ("words", "code", "problem"),
    [
        (["join", "loss#1"], 2, "found 1 scan, wanted two or more"),
        (["join"], 2, "found 0 scans, wanted two or more"),
        (["join", "loss#1", "--undo", "1"], 2, "found loss#1 beside --undo, wanted either"),
        (["join", "loss#1", "lost"], 3, "scan 'lost'"),
        (["join", "--undo", "4"], 3, "arrangement 4: not in this store"),
        (["split", "loss#1"], 2, "--at SHOT, --at TIME or --after N"),
        (["split", "--after", "3"], 2, "--at SHOT, --at TIME or --after N"),
        (["split", "loss#1", "--after", "9"], 2, "all its 9 shots would be on one side"),
        (["split", "loss#1", "--at", "nowhere"], 3, "none of its shots begins so, and it is no time"),
    ],
)
def test_what_cannot_be_done(rounds: Path, run: Run, words: list[str], code: int, problem: str) -> None:
    answer = run("--store", rounds, *words)
    assert (answer.code, answer.out) == (code, "")
    assert problem in answer.err
    assert "Traceback" not in answer.err


def test_the_order_of_taking_in_a_pipe(rounds: Path, run: Run) -> None:
    head, first, second = (line.split("\t") for line in run("--store", rounds, "scans").out.splitlines())
    place = head.index("order")
    assert (first[place], second[place]) == ("coil_current rising", "coil_current mixed")
    assert answered(run, "--store", rounds, "scan", "loss#1")["scan"]["order"] == {"coil_current": "rising"}


def test_the_history_of_a_shot_that_stayed_says_nothing(
    rounds: Path, run: Run, on_screen: Callable[..., str]
) -> None:
    assert run("--store", rounds, "split", "loss#1", "--after", "4").code == 0

    def told(uid: str) -> str:
        return " ".join(on_screen("--store", rounds, "amend", uid).split())

    assert "split" not in told("5-3-shot")
    assert "split from scan loss#1 to scan loss#3" in told("5-4-shot")
    assert run("--store", rounds, "split", "--undo", "1").code == 0
    assert "split" not in told("5-3-shot")
    assert "split undone to scan loss#1" in told("5-4-shot")
