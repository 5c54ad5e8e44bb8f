from __future__ import annotations

import getpass
import io
import json
import shutil
import sys
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.opening import create_store, open_store

Run = Callable[..., Any]
Show = Callable[..., str]


@pytest.fixture
def where(heron: Path, at_home: Path) -> Path:
    """Return a store of two nights that may be changed."""
    return Path(shutil.copy(heron / "heron.sqlite", at_home / "copy.sqlite"))


def noted(where: Path) -> list[tuple[str, str, str]]:
    with open_store(where) as store:
        table = store.notes()
    return list(table[["kind", "about", "text"]].itertuples(index=False, name=None))


def test_a_few_words_go_to_tonight(where: Path, run: Run) -> None:
    answer = run("--store", where, "note", "laser", "unlocked", "twice")
    assert (answer.code, answer.err) == (0, f"nightfold: store {where}\n")
    ((kind, about, text),) = noted(where)
    assert (kind, text) == ("night", "laser unlocked twice")
    assert abs(datetime.fromisoformat(about) - datetime.now()) < timedelta(days=1, hours=13)
    assert answer.out.startswith(f"noted on night {about} of heron, ")


def test_tonight_is_the_night_that_runs_on(at_home: Path, run: Run) -> None:
    """Shots every 10 minutes over a boundary that was 30 minutes ago: it is still last night's work."""
    path = at_home / "nightfold.sqlite"
    now = datetime.now(UTC)
    boundary = now - timedelta(minutes=30)
    (at_home / "m.toml").write_text(f'machine = "m"\nnight_boundary = "{boundary:%H:%M}"\n')
    with create_store(path) as store:
        store.use_card(at_home / "m.toml")
        store.take(
            {"machine": "m", "sequence": "s", "parameters": {"a": 1},
             "started": (now - timedelta(minutes=10 * k)).isoformat()}
            for k in range(12)
        )  # fmt: skip
    run("note", "still going")
    ((_, about, _),) = noted(path)
    with open_store(path) as store:
        assert [about] == [str(night) for night in store.nights()["night"]]
        assert store.night_of([now])[0] == store.night_of([now - timedelta(minutes=100)])[0]


@pytest.mark.parametrize(
    ("options", "found"),
    [
        (["--shot", "heron-20260928-0003"], ("shot", "heron-20260928-0003")),
        (["--scan", "loss-coarse"], ("scan", "loss-coarse#1")),
        (["--night", "2026-09-28"], ("night", "2026-09-28")),
        (["--last", "scan"], ("scan", "7")),
    ],
)
def test_on_what_is_named(options: list[str], found: tuple[str, str], where: Path, run: Run) -> None:
    assert run("note", "mirror 3 moved", *options, "--store", where).code == 0
    assert noted(where) == [(*found, "mirror 3 moved")]


def test_on_the_newest_shot(where: Path, run: Run) -> None:
    run("note", "atoms gone", "--last", "shot", "--store", where)
    with open_store(where) as store:
        newest = store.shots(set_aside=True)["uid"].iloc[-1]
    assert noted(where) == [("shot", newest, "atoms gone")]


def test_who_wrote_it(where: Path, run: Run) -> None:
    run("note", "one", "--store", where, "--by", "ida")
    run("note", "two", "--store", where)
    with open_store(where) as store:
        assert store.notes()["by"].tolist() == ["ida", getpass.getuser()]


def test_several_lines_from_stdin(where: Path, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stdin", io.StringIO("one\ntwo\n"))
    assert run("note", "-", "--store", where).code == 0
    assert noted(where)[0][2] == "one\ntwo"


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (["note", " "], 2, "found no text"),
        (["note", "a\0b"], 2, "wanted text without NUL"),
        (["note", "a", "--shot", "nothing"], 3, "no such uid"),
        (["note", "a", "--fit", "3"], 3, "fit 3: not in this store"),
        (["note", "a", "--night", "monday"], 3, "wanted the date of its evening"),
        (["note", "a", "--last", "fit"], 2, "--last fit: there is none yet"),
        (["note", "a", "--machine", "egret"], 3, "machine 'egret'"),
        (["notes", "--scan", "gain"], 3, "scan 'gain'"),
    ],
)
def test_what_is_refused(words: list[str], code: int, said: str, where: Path, run: Run) -> None:
    answer = run(*words, "--store", where)
    assert (answer.code, answer.out) == (code, "")
    assert said in answer.err
    assert noted(where) == []


def test_found_again(where: Path, run: Run) -> None:
    run("note", "Laser unlocked", "--scan", "loss-coarse", "--by", "ida", "--store", where)
    run("note", "pump vented", "--night", "2026-09-28", "--store", where)
    answer = json.loads(run("notes", "LASER", "lock", "--store", where, "--json").out)
    (note,) = answer["notes"]
    assert {**note, "at": None} == {
        "at": None, "by": "ida", "kind": "scan", "about": "loss-coarse#1", "machine": "heron", "text": "Laser unlocked",
    }  # fmt: skip
    assert note["at"].endswith("+00:00")
    head, row = run("notes", "vented", "--store", where).out.splitlines()
    assert head.split("\t") == ["at", "by", "machine", "kind", "about", "note"]
    assert row.split("\t")[2:] == ["heron", "night", "2026-09-28", "pump vented"]
    assert "no notes like that" in run("notes", "xyz", "--store", where).err
    assert json.loads(run("notes", "--until", "2026-01-01", "--store", where, "--json").out)["notes"] == []


def test_no_notes_yet(where: Path, run: Run) -> None:
    assert "no notes yet; 'nightfold note TEXT' writes one" in run("notes", "--store", where).err


def test_shown_where_one_looks(where: Path, run: Run, on_screen: Show) -> None:
    with open_store(where) as store:
        store.fit("loss-coarse", "lorentzian", observable="atom_number")
        fit = store.fits()[-1].id
    for text, *subject in (
        ("on the shot\nsecond line", "--shot", "heron-20260928-0003"),
        ("on the scan", "--scan", "loss-coarse"),
        ("on the fit", "--fit", str(fit)),
        ("on the night", "--night", "2026-09-28"),
    ):
        run("note", text, *subject, "--by", "ida", "--store", where)

    def answer(*words: str) -> Any:
        return json.loads(run(*words, "--store", where, "--json").out)

    assert answer("shots", "heron-20260928-0003")["shot"]["notes"] == ["on the shot\nsecond line"]
    assert answer("scan", "loss-coarse")["scan"]["notes"] == ["on the scan"]
    assert [scan["notes"] for scan in answer("scans")["scans"] if scan["label"] == "loss-coarse"] == [
        ["on the scan"]
    ]
    assert answer("fits")["fits"][-1]["notes"] == ["on the fit"]
    assert [night["notes"] for night in answer("nights")["nights"]] == [["on the night"], []]

    shot = on_screen("shots", "heron-20260928-0003", "--store", where)
    assert "  note        on the shot\n              second line (ida, " in shot
    assert "  note   on the scan\n" in on_screen("scan", "loss-coarse", "--store", where)
    assert "note: on the fit" in on_screen("fits", "--store", where)
    assert "note: on the night" in on_screen("nights", "--store", where)


@pytest.mark.parametrize("width", [80, 120])
def test_hostile_notes_are_shown_as_they_are(where: Path, run: Run, on_screen: Show, width: int) -> None:
    hostile = "\x1b[2J\x1b]0;gone\x07\u202eevil [bold]not[/bold] " + "x" * 200
    for subject in (["--night", "2026-09-28"], ["--scan", "loss-coarse"], ["--shot", "heron-20260928-0003"]):
        run("note", hostile, *subject, "--store", where)
    for command in ("notes", "nights", "scan loss-coarse", "shots heron-20260928-0003"):
        text = on_screen(*command.split(), "--store", where, width=width)
        assert "\\x1b[2J" in text, command
        assert not {"\x1b", "\x07", "\u202e"} & set(text)
        assert max(map(len, text.split("\n")[1:])) <= width
    assert "[bold]not[/bold]" in on_screen("notes", "--store", where, width=120).replace("\n", "")


def test_what_is_no_text_is_refused(heron: Path, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    answer = run("--store", heron / "heron.sqlite", "note", "caf\udce9")
    assert (answer.code, "found bytes that are not UTF-8" in answer.err) == (2, True)
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO(b"\xff\xfe bad"), encoding="utf-8"))
    answer = run("--store", heron / "heron.sqlite", "note", "-")
    assert (answer.code, "found bytes that are not UTF-8" in answer.err) == (2, True)
