"""Scans follow when settings of their shots are corrected."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 18, tzinfo=UTC)


def shot(number: int, point: float, **changes: Any) -> dict[str, Any]:
    more = changes.pop("parameters", {})
    return {
        "uid": f"shot{number:03d}", "machine": "heron", "sequence": "hold",
        "started": (START + timedelta(seconds=20 * number)).isoformat(),
        "parameters": {"coil": {"value": point, "unit": "A"}, "hold": 0.1, **more},
        "observables": {"n": 1000.0 + number}, **changes,
    }  # fmt: skip


def points(store: Store, key: int | str) -> list[float]:
    return sorted(set(store.scan(key).table().coil))


def axes(store: Store, key: int | str) -> list[str]:
    return [axis.parameter for axis in store.scan(key).axes]


def test_a_labelled_scan_has_its_points_and_axes_settled_again(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(
            shot(n, 60 + n % 5, scan="loss", parameters={"synth": 2.0 * (60 + n % 5), "hold": 0.1 + n % 5})
            for n in range(20)
        )
        assert set(store.scan("loss").followers) | set(axes(store, "loss")) == {"coil", "synth", "hold"}
        store.correct([], {"hold": 0.1}, "a column too far", scan="loss", even_if_swept=True)
        assert set(store.scan("loss").followers) | set(axes(store, "loss")) == {"coil", "synth"}
        store.correct(["shot007"], {"coil": 62.5}, "misread")
        assert points(store, "loss") == [60, 61, 62, 62.5, 63, 64]


def test_what_no_longer_follows_the_one_declared_axis_is_forgotten(store: Store) -> None:
    store.take(
        shot(n, 60 + n % 5, scan="loss", swept=["coil"], parameters={"hold": 0.1 + n % 5}) for n in range(20)
    )
    assert store.scan("loss").followers == {"hold": "coil"}
    store.correct([], {"hold": 0.1}, "a column too far", scan="loss", even_if_swept=True)
    assert store.scan("loss").followers == {}


@pytest.mark.parametrize("swept", [["coil"], []])
def test_an_unlabelled_stream_is_folded_again(anywhere: str, swept: list[str]) -> None:
    """A point that was mistyped tears a found scan, or is one too many; corrected, it is as if it had been right."""
    right = [shot(n, 60.0 + 0.5 * (n % 9), swept=swept) for n in range(27)]
    rest = [shot(n, 70.0) for n in range(200, 205)]
    wrong = [dict(row) for row in right]
    for number in (4, 13, 14):
        wrong[number] = shot(number, 612.0, swept=swept, parameters={"hold": 7.0})
    with open_store(anywhere) as store:
        store.take([*wrong, *rest])
        mistaken = [(scan.shots, points(store, scan.id)) for scan in store.scans()]
        for number in (4, 13, 14):
            point = right[number]["parameters"]["coil"]
            store.correct([f"shot{number:03d}"], {"coil": point, "hold": 0.1}, "decimal point")
        (found,) = store.scans()
        assert (found.shots, axes(store, found.id)) == (27, ["coil"])
        assert points(store, found.id) == [60 + 0.5 * n for n in range(9)]
        assert mistaken != [(27, points(store, found.id))]


def test_a_correction_can_undo_a_found_scan(store: Store) -> None:
    store.take([shot(n, 60.0 + 0.5 * (n % 9)) for n in range(27)])
    assert len(store.scans()) == 1
    store.correct([f"shot{n:03d}" for n in range(27)], {"coil": 60}, "the supply was stuck")
    assert store.scans() == []
    assert set(store.shots().scan) == {None}


def test_shots_far_apart_are_folded_each_where_it_is(store: Store) -> None:
    far = [shot(n + 500_000, 60.0 + 0.5 * (n % 9)) for n in range(18)]
    store.take([*(shot(n, 60.0 + 0.5 * (n % 9)) for n in range(18)), *far])
    assert store.correct(["shot003", "shot500003"], {"coil": 61.75}, "read off the supply") == 2
    one, other = store.scans()
    assert points(store, one.id) == points(store, other.id)
    assert 61.75 in points(store, one.id)


def test_a_stream_goes_on_after_a_correction(store: Store) -> None:
    rows = [shot(n, 60.0 + 0.5 * (n % 9), swept=["coil"]) for n in range(27)]
    store.take(rows[:13])
    store.correct(["shot005"], {"coil": 60.25}, "read off the supply")
    store.take(rows)
    (found,) = store.scans()
    assert (found.shots, 60.25 in points(store, found.id)) == (27, True)


def test_scans_arranged_by_hand_follow_and_stay(anywhere: str) -> None:
    with open_store(anywhere) as store:
        first = [shot(n, 60.0 + 0.5 * (n % 9), swept=["coil"]) for n in range(18)]
        later = [shot(n + 2000, 60.0 + 0.5 * (n % 9), swept=["coil"]) for n in range(18)]
        store.take([*first, *later])
        joined = store.join_scans([scan.id for scan in store.scans()], reason="one night", by="ann")
        assert store.correct(["shot003", "shot2003"], {"coil": 61.75}, "read off the supply") == 2
        (found,) = store.scans()
        assert (found.id, found.shots, axes(store, found.id)) == (joined.id, 36, ["coil"])
        assert 61.75 in points(store, found.id)
        rows = [event for event in store.history("shot2003").events if event.kind == "join"]
        assert [(event.new, event.by, event.why) for event in rows] == [(str(joined.id), "ann", "one night")]
        assert rows[0].old != rows[0].new
        number = int(store.arrangements()["number"].iloc[0])
        store.undo_arrangement(number, by="bob")
        assert [scan.shots for scan in store.scans()] == [18, 18]
        undone = store.history("shot2003").events[-1]
        assert (undone.kind, undone.old, undone.by) == ("join undone", None, "bob")


def test_a_found_scan_that_dissolved_comes_back(anywhere: str) -> None:
    """Corrected to one value its shots are no scan; corrected back they are the scan that its fit and note are of."""
    right = {f"shot{n:03d}": 58 + 0.5 * n for n in range(13)}
    with open_store(anywhere) as store:
        store.take(shot(n, point) for n, point in enumerate(right.values()))
        store.take(shot(n, 60.0) for n in range(300, 305))
        store.add_note("the lock was shaky", scan=1)
        store.fit(1, "gaussian", observable="n")
        store.correct(list(right), {"coil": 60}, "the wrong column")
        assert (store.scans(), store.fits()[0].stale) == ([], True)
        store.take(shot(n, 60 + 0.5 * (n % 9)) for n in range(600, 609))
        other = store.scans()[0].id
        for uid, point in right.items():
            if point != 60:
                store.correct([uid], {"coil": point}, "it was right")
        assert {scan.id: scan.shots for scan in store.scans()} == {1: 13, other: 9}
        assert (points(store, 1), axes(store, 1)) == (list(right.values()), ["coil"])
        assert [(fit.scan_id, fit.stale) for fit in store.fits()] == [(1, False)]
        assert store.notes(scan=1)["text"].tolist() == ["the lock was shaky"]


def test_a_scan_of_mostly_other_shots_is_not_the_one_that_dissolved(store: Store) -> None:
    store.take(shot(n, 60 + 0.5 * n) for n in range(8))
    store.fit(1, "gaussian", observable="n")
    store.correct([f"shot{n:03d}" for n in range(8)], {"coil": 60}, "the supply was stuck")
    store.take(shot(n, 60 + 0.5 * n) for n in range(8, 20))
    for n in range(1, 8):
        store.correct([f"shot{n:03d}"], {"coil": 60 + 0.5 * n}, "it was not")
    assert [scan.shots for scan in store.scans()] == [20]
    assert store.scans()[0].id != 1
