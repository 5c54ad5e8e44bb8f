"""The history of a shot: what happened to it, and which reading held from when to when."""

from __future__ import annotations

import json
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.errors import NotFound
from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 18, tzinfo=UTC)


def shot(number: int, **changes: Any) -> dict[str, Any]:
    return {
        "uid": f"shot{number:03d}", "machine": "heron", "sequence": "hold", "scan": "loss", "swept": ["coil"],
        "started": (START + timedelta(seconds=20 * number)).isoformat(),
        "parameters": {"coil": {"value": 60 + number / 10, "unit": "A"}, "axis": "x"},
        "observables": {"n": {"value": 1000.0 + number**2, "stderr": 10}}, **changes,
    }  # fmt: skip


def test_everything_in_time_order(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n) for n in range(12)])
        before = datetime.now(UTC)
        store.fit("loss", "exponential", observable="n")
        store.take(
            [{"uid": "shot003", "observables": {"n": {"value": 1100, "stderr": 20}}, "derivation": "refit"}]
        )
        store.correct(["shot003"], {"coil": 60.35, "axis": "y"}, "read off the supply", by="ann")
        store.set_aside(["shot003"], "laser unlocked", by="bob")
        store.fit("loss", "exponential", observable="n")
        store.put_back(["shot003"], by="cal")
        store.add_note("look again", shot="shot003", by="ann")
        again = {"name": "refit", "version": "2"}
        store.take([{"uid": "shot003", "observables": {"n": 1200, "width": 4}, "derivation": again}])
        store.take([{"uid": "shot003", "observables": {"depth": 7}}])
        history = store.history("shot003")
        first, second = [fit.fit for fit in history.fits]
        after = datetime.now(UTC)
    assert [(event.kind, event.what) for event in history.events] == [
        ("taken", ""), ("fit", f"fit {first}"), ("reading", "n"), ("corrected", "coil"), ("corrected", "axis"),
        ("set aside", ""), ("fit", f"fit {second}"), ("put back", ""), ("note", "look again"), ("reading", "n"),
        ("record", "width"),
    ]  # fmt: skip
    taken, fit, reading, coil, axis, aside, _, back, note, *_ = history.events
    assert (taken.at, history.machine) == (START + timedelta(seconds=60), "heron")
    assert all(before <= event.at <= after for event in history.events[1:])
    assert (coil.old, coil.new, coil.unit, coil.by, coil.why) == (
        60.3,
        60.35,
        "A",
        "ann",
        "read off the supply",
    )
    assert (axis.old, axis.new, axis.unit) == ("x", "y", "")
    assert (aside.why, aside.by, back.by, note.by) == ("laser unlocked", "bob", "cal", "ann")
    assert [(use.role, use.state) for use in history.fits] == [("used", "replaced"), ("set aside", "stale")]
    assert (fit.new.scan, fit.new.model, fit.new.observable) == ("loss#1", "exponential", "n")
    one, two, three = history.readings["n"]
    assert (one.value, one.stderr, one.derivation, one.since) == (1009.0, 10.0, None, None)
    assert (two.value, two.stderr, two.derivation, two.version) == (1100.0, 20.0, "refit", None)
    assert (three.value, three.stderr, three.derivation, three.version) == (1200.0, None, "refit", "2")
    assert (one.until, two.until, three.until) == (two.since, three.since, None)
    assert one.until == reading.at
    assert (reading.old, reading.new) == (one, two)
    assert [held.since for held in history.readings["width"]] == [None]
    assert history.changed


def test_a_quiet_shot(store: Store, tmp_path: Path) -> None:
    file = tmp_path / "night.jsonl"
    file.write_text("".join(json.dumps(row) + "\n" for row in (shot(0), shot(1, note="calm"))))
    store.take_file(file)
    quiet, noted = store.history("shot000"), store.history("shot001")
    assert [(event.kind, event.what) for event in quiet.events] == [("taken", f"{file}:1")]
    assert [(event.kind, event.what) for event in noted.events[1:]] == [("note", "calm")]
    assert not quiet.changed
    assert quiet.fits == ()
    with pytest.raises(NotFound, match="shot 'nobody'"):
        store.history("nobody")


def test_a_value_taken_back_and_nan(store: Store) -> None:
    store.take([shot(0, observables={"n": float("nan")})])
    store.take([{"uid": "shot000", "observables": {"n": 5}, "derivation": "a"}])
    store.take([{"uid": "shot000", "observables": {"n": None}, "derivation": "b"}])
    assert [held.state for held in store.history("shot0").readings["n"]] == ["nan", None, "null"]


def test_failed_and_joined_by_hand(store: Store) -> None:
    store.take([shot(0), shot(1, failed="no atoms")])
    aside = store.history("shot001").events[1]
    assert (aside.kind, aside.what, aside.why) == ("set aside", "its record says so", "no atoms")


def test_the_shot_itself_tells_what_changed(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(0), shot(1)])
        store.correct(["shot000"], {"axis": "y"}, "why")
        store.take([{"uid": "shot000", "observables": {"n": 5, "m": 3}, "derivation": "a"}])
        view, other = store.shot("shot000"), store.shot("shot001")
    assert (set(view.corrected), set(view.reread)) == ({"axis"}, {"n"})
    assert not other.corrected | other.reread


def test_a_scan_that_is_gone_is_not_taken_for_another(anywhere: str) -> None:
    """The scan that an undone split had made is not there any more when the next one comes."""
    with open_store(anywhere) as store:
        store.take([shot(n) for n in range(12)])
        store.split_scan("loss", at=5)
        assert [(event.old, event.new) for event in store.history("shot008").events[1:]] == [
            ("loss#1", "loss#2")
        ]
        store.undo_arrangement(1)
        store.take([shot(n, scan="other") for n in range(12, 18)])
        (split, undone) = store.history("shot008").events[1:]
    assert (split.kind, split.old, split.new) == ("split", "loss#1", None)
    assert (undone.kind, undone.old, undone.new) == ("split undone", None, "loss#1")


def test_a_join_in_which_the_shot_stayed_is_not_told(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n, scan="loss" if n < 6 else "los") for n in range(12)])
        store.join_scans(["loss", "los"], reason="one label")
        stayed, moved = (store.history(uid).events for uid in ("shot002", "shot008"))
        assert [event.kind for event in stayed] == ["taken"]
        assert [event.kind for event in moved] == ["taken", "join"]
        store.undo_arrangement(int(store.arrangements()["number"].iloc[0]))
        assert [event.kind for event in store.history("shot002").events] == ["taken"]
