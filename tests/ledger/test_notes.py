"""Notes: on exactly one subject, found again by words whatever their capitals and accents."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)


def scan(
    label: str | None, *, machine: str = "heron", first: int = 0, count: int = 6
) -> list[dict[str, Any]]:
    return [
        {"machine": machine, "sequence": "hold", "uid": f"{machine}-{label}-{first + k}", "scan": label,
         "started": (START + timedelta(seconds=20 * (first + k))).isoformat(), "swept": ["current"],
         "parameters": {"current": 60.0 + k}, "observables": {"atoms": 1e5 - 1e4 * k}}
        for k in range(count)
    ]  # fmt: skip


def test_on_every_kind_of_subject(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(scan("loss"))
        store.fit("loss", "gaussian", observable="atoms")
        kept = store.fits()[0].id
        made = [
            store.add_note("first", shot="heron-loss-2", by="ida"),
            store.add_note("second", scan="loss"),
            store.add_note("third", fit=kept),
            store.add_note("fourth", night=date(2026, 10, 5), machine="heron"),
            store.add_note("fifth", night="2026-10-06"),
        ]
        assert [(note.kind, note.about) for note in made] == [
            ("shot", "heron-loss-2"), ("scan", "loss#1"), ("fit", str(kept)),
            ("night", "2026-10-05"), ("night", "2026-10-06"),
        ]  # fmt: skip
        table = store.notes()
        assert list(table.columns) == ["at", "by", "kind", "about", "machine", "text", "subject"]
        assert table["text"].tolist() == ["first", "second", "third", "fourth", "fifth"]
        assert set(table["machine"]) == {"heron"}
        assert table["by"].tolist() == ["ida", None, None, None, None]
        assert str(table["at"].dt.tz) == "UTC"
        assert table["at"].is_monotonic_increasing
        for where in (
            {"shot": "heron-loss-2"}, {"scan": "loss#1"}, {"fit": kept}, {"night": "2026-10-05"},
        ):  # fmt: skip
            assert len(store.notes(**where)) == 1, where


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ("laser", ["The LASER unlocked twice", "laser café\nsecond line: Ålesund"]),
        ("cafe second", ["laser café\nsecond line: Ålesund"]),
        ("CAFÉ", ["laser café\nsecond line: Ålesund"]),
        ("alesund laser", ["laser café\nsecond line: Ålesund"]),
        (["lock", "twice"], ["The LASER unlocked twice"]),
        ("straße", ["STRASSE blocked, 5 µm pinhole"]),
        ("5 μm", ["STRASSE blocked, 5 µm pinhole"]),
        ("laser pinhole", []),
        ("%", []),
        (
            "",
            ["The LASER unlocked twice", "laser café\nsecond line: Ålesund", "STRASSE blocked, 5 µm pinhole"],
        ),
    ],
)
def test_words(store: Store, words: Any, found: list[str]) -> None:
    store.take(scan("loss"))
    for text in (
        "The LASER unlocked twice",
        "laser cafe\u0301\nsecond line: Ålesund",
        "STRASSE blocked, 5 µm pinhole",
    ):
        store.add_note(text, night="2026-10-05")
    assert store.notes(words)["text"].tolist() == found


def test_what_is_refused(store: Store) -> None:
    with pytest.raises(NotFound, match="none is in this store yet"):
        store.add_note("x", night="2026-10-05")
    store.take(scan("loss"))
    for wrong, error, said in (
        ({"text": "  \n", "night": "2026-10-05"}, ValueError, "found no text"),
        ({"text": "a\0b", "night": "2026-10-05"}, ValueError, "without NUL"),
        ({"text": "x"}, ValueError, "found no subject"),
        ({"text": "x", "shot": "heron-loss-1", "fit": 3}, ValueError, "found shot and fit, wanted one of"),
        ({"text": "x", "shot": "nothing"}, NotFound, "no such uid"),
        ({"text": "x", "scan": "gain"}, NotFound, "scan 'gain'"),
        ({"text": "x", "fit": 12}, NotFound, "fit 12: not in this store"),
        ({"text": "x", "night": "5 October"}, NotFound, "wanted the date of its evening"),
        ({"text": "x", "night": "2026-10-05", "machine": "egret"}, NotFound, "machine 'egret'"),
    ):
        with pytest.raises(error, match=said):
            store.add_note(**wrong)
    assert store.notes().empty
    store.take(scan("loss", machine="egret"))
    with pytest.raises(ChoiceNeeded, match="egret, heron; name one"):
        store.add_note("x", night="2026-10-05")


def test_what_looks_like_a_command_is_text(store: Store) -> None:
    store.take(scan("loss"))
    text = "'; DROP TABLE shot; -- \x1b[2J\t<b>"
    assert store.add_note(text + "\r\nb\r", night="2026-10-05").text == text + "\nb"
    assert store.notes("drop")["text"].tolist() == [text + "\nb"]
    assert len(store.shots()) == 6


def test_the_note_of_a_record_counts_from_its_shot(store: Store) -> None:
    first, second, *_ = scan("loss")
    store.take([{**first, "note": "mot dim"}])
    store.take([second])
    store.take([{**second, "note": "came later"}])
    table = store.notes(until="2027-01-01")
    assert table["at"][0].to_pydatetime() == START
    assert store.notes(since="2026-10-05", until="2026-10-06")["text"].tolist() == ["mot dim"]
    assert store.notes(shot=second["uid"])["text"].tolist() == ["came later"]
    assert store.shot(first["uid"]).notes == ("mot dim",)


def test_only_about_one_machine(store: Store) -> None:
    store.take([*scan("loss"), *scan("loss", machine="egret")])
    store.add_note("ours", night="2026-10-05", machine="heron")
    store.add_note("theirs", shot="egret-loss-0")
    assert store.notes(machine="heron")["text"].tolist() == ["ours"]
    assert store.notes(machine="egret")["text"].tolist() == ["theirs"]


def test_notes_on_a_fit_stay_with_the_one_that_replaces_it(store: Store) -> None:
    store.take(scan("loss"))
    store.fit("loss", "gaussian", observable="atoms")
    old = store.fits()[0].id
    store.add_note("for the paper", fit=old)
    store.set_aside(["heron-loss-0"], "laser")
    store.fit("loss", "gaussian", observable="atoms")
    new = store.fits()[0].id
    assert new != old
    assert store.notes(fit=new)["text"].tolist() == ["for the paper"]


def test_notes_go_with_the_shots_of_a_scan(anywhere: str) -> None:
    """Two rounds become one when the shots between them come late; the note of the one that goes is kept."""
    late = scan("loss", first=2400, count=2)
    with open_store(anywhere) as store:
        early, after = scan("loss"), scan("loss", first=4800)
        store.take(early)
        store.take(after)
        assert [one.key for one in store.scans()] == ["loss#1", "loss#2"]
        store.add_note("of the first", scan="loss#1")
        store.add_note("of the second", scan="loss#2")
        store.take(late)
        assert [one.key for one in store.scans()] == ["loss#1"]
        assert sorted(store.notes(scan="loss")["text"]) == ["of the first", "of the second"]


def test_the_words_stand_in_the_store_until_the_end(store_path: Path) -> None:
    with open_store(store_path) as store:
        store.take(scan("loss"))
        store.add_note("kept", scan="loss")
    with open_store(store_path) as store:
        assert store.notes()["text"].tolist() == ["kept"]
