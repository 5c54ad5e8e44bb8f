"""Cards and other names of machines on the command line."""

from __future__ import annotations

import getpass
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from nightfold.opening import create_store, open_store

Run = Callable[..., Any]
Show = Callable[..., str]


def record(number: int, machine: str, **fields: Any) -> dict[str, Any]:
    started = f"2026-10-05T21:{number:02d}:00+02:00"
    return {
        "machine": machine,
        "sequence": "hold",
        "started": started,
        "scan": "loss",
        "parameters": {"a": number},
        **fields,
    }


@pytest.fixture
def both(at_home: Path) -> Path:
    """Return a store with shots of `Heron` and of `heron`, which has a card."""
    path = at_home / "nightfold.sqlite"
    (at_home / "heron.toml").write_text('machine = "heron"\nzone = "Europe/Vienna"\n', "utf-8")
    with create_store(path) as store:
        store.use_card(at_home / "heron.toml")
        store.take([record(k, "Heron") for k in range(3)])
        store.take([record(k, "heron") for k in range(3, 8)])
    return path


MERGE = ("merge-machines", "Heron", "heron", "--because", "set up wrongly")


def test_merged(both: Path, run: Run) -> None:
    answer = run(*MERGE)
    assert answer.code == 0
    assert answer.out.splitlines() == [
        "3 shots of Heron are heron's, in 1 scan.",
        "Sequences: 1, 1 of them at both. Parameters, observables and sensors: 1, 1 of them at both.",
        "The store as it was: nightfold.sqlite.before-merge",
    ]
    with open_store(both) as store:
        assert store.machines() == ["heron"]
        assert [(scan.key, scan.shots) for scan in store.scans()] == [("loss#1", 8)]
    with open_store(f"{both}.before-merge") as copy:
        assert copy.machines() == ["Heron", "heron"]


def test_tried_first(both: Path, run: Run) -> None:
    answer = json.loads(run(*MERGE, "--dry-run", "--by", "ida", "--json").out)
    assert answer == {
        "schema": 1, "old": "Heron", "into": "heron", "shots": 3, "scans": 1, "sequences": 1, "shared_sequences": 1,
        "names": 1, "shared_names": 1, "doubles": 0, "copy": None, "dry_run": True,
    }  # fmt: skip
    assert "3 shots of Heron would be heron's" in run(*MERGE, "--dry-run").out
    with open_store(both) as store:
        assert store.machines() == ["Heron", "heron"]
    assert not Path(f"{both}.before-merge").exists()


def test_all_reasons_against_it_on_stderr(both: Path, run: Run) -> None:
    with open_store(both) as store:
        store.take(
            [
                record(10, "Heron", parameters={"a": 1, "b": "x", "c": "y"}),
                record(11, "heron", parameters={"a": 1, "b": 1, "c": 2}),
            ]
        )
    answer = run(*MERGE)
    assert (answer.code, answer.out) == (5, "")
    assert "parameters.b: found a text at Heron, wanted a number as at heron" in answer.err
    assert "parameters.c: found a text" in answer.err
    assert not Path(f"{both}.before-merge").exists()


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (["merge-machines", "Heron", "heron"], 2, "--because"),
        (["merge-machines", "Heron", "heron", "--because", " "], 2, "found nothing, wanted why"),
        (["merge-machines", "egret", "heron", "--because", "x"], 3, "machine 'egret': not in this store"),
        (["merge-machines", "heron", "heron", "--because", "x"], 5, "these are the same machine"),
    ],
)
def test_what_is_refused(both: Path, run: Run, words: list[str], code: int, said: str) -> None:
    answer = run(*words)
    assert (answer.code, answer.out) == (code, "")
    assert said in answer.err


def test_the_other_name_is_understood_and_said(both: Path, run: Run) -> None:
    run(*MERGE)
    for command in ("nights", "scans", "shots", "edits", "notes", "card"):
        answer = run(command, "--machine", "Heron")
        assert answer.code == 0, command
        assert "nightfold: Heron is another name of heron\n" in answer.err, command
        assert run(command, "--machine", "heron").out == answer.out, command
    assert len(run("shots", "--machine", "Heron").out.splitlines()) == 9
    lines = "".join(json.dumps(record(k, "Heron")) + "\n" for k in range(3))
    Path("old.jsonl").write_text(lines)
    assert json.loads(run("take", "old.jsonl", "--json").out)["known"] == 3
    Path("old.csv").write_text("machine,sequence,started,a\nHeron,hold,2026-10-05T23:00:00+02:00,3\n")
    assert json.loads(run("take", "old.csv", "--parameters", "a", "--json").out)["new"] == 1


def test_who_did_it(both: Path, run: Run) -> None:
    import sqlite3

    run(*MERGE)
    connection = sqlite3.connect(both)
    assert connection.execute("SELECT name, by, reason FROM machine_alias").fetchall() == [
        ("Heron", getpass.getuser(), "set up wrongly")
    ]
    connection.close()


def test_the_card_as_it_was_given(both: Path, run: Run, on_screen: Show) -> None:
    text = Path("heron.toml").read_text("utf-8")
    assert run("card", "--machine", "heron").out == text
    assert on_screen("card", "--machine", "heron").split("\n", 1)[1] == text
    assert run("card").code == 2  # there are two machines


def test_the_cards_there_were(both: Path, run: Run, on_screen: Show) -> None:
    changed = 'machine = "heron"\nzone = "Europe/Vienna"\nrejoin_within = "2 h"\n'
    with open_store(both) as store:
        for text in (changed, 'machine = "heron"\nzone = "Europe/Vienna"\nrejoin_within = "3 h"\n', changed):
            Path("heron.toml").write_text(text, "utf-8")
            store.use_card("heron.toml")
    answer = json.loads(run("card", "--history", "--machine", "heron", "--json").out)
    assert answer["machine"] == "heron"
    assert [(card["in_force"], card["changes"]) for card in answer["cards"]] == [
        (False, []),
        (False, ['+rejoin_within = "2 h"']),
        (False, ['-rejoin_within = "2 h"', '+rejoin_within = "3 h"']),
        (True, ['-rejoin_within = "3 h"', '+rejoin_within = "2 h"']),
    ]
    assert answer["cards"][-1]["toml"] == changed
    screen = on_screen("card", "--history", "--machine", "heron")
    assert "in force  changed lines" in screen
    assert screen.count('+rejoin_within = "2 h"') == 2
    assert max(map(len, screen.split("\n")[1:])) <= 80


def test_no_card(run: Run, at_home: Path) -> None:
    with create_store("nightfold.sqlite") as store:
        assert "none is in this store yet" in run("card").err
        store.take([record(1, "heron")])
    assert "heron has no card; 'nightfold take --card FILE" in run("card").err


@pytest.mark.parametrize(
    ("name", "said"),
    [("Heron", True), ("heron2", True), ("hern", True), ("heron", False), ("egret", False), ("h", False)],
)
def test_a_name_like_another_is_pointed_at(run: Run, at_home: Path, name: str, said: bool) -> None:
    with create_store("nightfold.sqlite") as store:
        store.take([record(1, "heron")])
    Path("a.jsonl").write_text(json.dumps(record(2, name)) + "\n")
    answer = run("take", "a.jsonl")
    assert answer.code == 0
    assert (f"'nightfold merge-machines {name} heron --because TEXT'" in answer.err) == said
    assert "merge-machines" not in run("take", "a.jsonl").err  # said once, when it came
