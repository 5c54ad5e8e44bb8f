"""What comes later by uid alone: readings, nulls, notes, frames."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import select

from nightfold import tables
from nightfold.opening import open_store
from nightfold.store import Store


def record(**changes: Any) -> dict[str, Any]:
    base: dict[str, Any] = {
        "uid": "u1",
        "machine": "heron",
        "started": "2026-10-05T20:00:00+00:00",
        "sequence": "hold",
        "parameters": {"coil": 1.5},
        "observables": {"n": {"value": 5.0, "stderr": 1.0}},
    }
    return {**base, **changes}


@pytest.fixture
def taken(anywhere: str) -> Iterator[Store]:
    """Return a store with one shot, on each engine."""
    with open_store(anywhere) as opened:
        assert opened.take([record()]).new == 1
        yield opened


def readings(store: Store) -> dict[str, Any]:
    return {name: reading.value for name, reading in store.shot("u1").observables.items()}


def reason(store: Store, late: dict[str, Any]) -> str:
    (refused,) = store.take([late]).refused
    return refused.reason


def test_a_null_by_uid_alone_takes_no_value_back(taken: Store) -> None:
    outcome = taken.take([{"uid": "u1", "observables": {"n": None, "m": None}}])
    assert (outcome.amended, outcome.refused) == (1, [])  # that m was not read is new
    assert readings(taken)["n"] == 5.0
    assert taken.take([{"uid": "u1", "observables": {"n": None}}]).known == 1
    assert readings(taken)["n"] == 5.0


def test_a_null_of_an_analysis_says_that_it_found_no_value(taken: Store) -> None:
    assert taken.take([{"uid": "u1", "observables": {"n": None}, "derivation": "fit"}]).amended == 1
    found = taken.shot("u1").observables["n"]
    assert math.isnan(found.value)
    assert found.state == "null"


@pytest.mark.parametrize("also", [{}, {"observables": {"m": 2}}])
def test_a_note_by_uid_alone(taken: Store, also: dict[str, Any]) -> None:
    late = {"uid": "u1", "note": "shutter sounded odd", **also}
    assert taken.take([late]).amended == 1
    assert taken.shot("u1").notes == ("shutter sounded odd",)
    assert taken.take([late]).known == 1
    assert readings(taken)["n"] == 5.0


def test_frames_by_uid_alone(taken: Store) -> None:
    frame = {"camera": "side", "role": "atoms", "path": "a.tif"}
    assert taken.take([{"uid": "u1", "frames": [frame]}]).amended == 1
    assert taken.shot("u1").frames == (("side", "atoms", "a.tif"),)
    assert taken.take([{"uid": "u1", "frames": [frame], "observables": {}}]).known == 1


def test_another_path_for_the_same_frame_is_refused_whole(taken: Store) -> None:
    frame = {"camera": "side", "role": "atoms", "path": "a.tif"}
    taken.take([{"uid": "u1", "frames": [frame]}])
    other = [{"camera": "top", "role": "atoms", "path": "t.tif"}, {**frame, "path": "b.tif"}]
    for late in ({"uid": "u1", "frames": other, "observables": {"fresh": 1}}, record(frames=other)):
        text = reason(taken, late)
        assert text.startswith("frames.1.path: found 'b.tif', wanted 'a.tif'")
        assert taken.shot("u1").frames == (("side", "atoms", "a.tif"),)
        assert "fresh" not in readings(taken)
    with taken._session.reading() as connection:
        assert "fresh" not in connection.execute(select(tables.observable.c.name)).scalars().all()


def test_an_amendment_brings_something(taken: Store) -> None:
    assert "a shot needs machine, started and sequence" in reason(taken, {"uid": "u1"})
