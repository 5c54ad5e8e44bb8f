"""How long a shot took: the sum of its steps."""

from __future__ import annotations

import math
from typing import Any

import pytest

from nightfold.ledger.selecting import Selection, select_shots
from nightfold.ledger.sequences import shot_durations
from nightfold.opening import open_store
from nightfold.store import Store


def seconds(store: Store, **choice: Any) -> list[float]:
    with store._session.reading() as connection:
        rows, _ = select_shots(connection, Selection(**choice))
        return [float(one) for one in shot_durations(connection, rows)]


def record(minute: int, *durations: Any, sequence: str = "look", **fields: Any) -> dict[str, Any]:
    steps = [{"name": f"step{n % 3}", "duration": one} for n, one in enumerate(durations)]
    return {
        "machine": "heron", "started": f"2026-10-05T21:{minute:02d}:00+02:00",
        "sequence": {"name": sequence, "steps": steps}, **fields,
    }  # fmt: skip


def of(value: float, unit: str) -> dict[str, Any]:
    return {"value": value, "unit": unit}


def test_units_are_brought_to_seconds_and_moving_durations_count(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([
            record(n, of(10, "s"), of(250, "ms"), of(5 + n, "us"), of(0.75, "min")) for n in range(30)
        ])  # fmt: skip
        assert seconds(store) == pytest.approx([55.25 + (5 + n) * 1e-6 for n in range(30)], rel=1e-14)


def test_unknown_where_a_duration_or_its_unit_is_missing(store: Store) -> None:
    intake = store.take([
        record(0, of(10, "s"), None),
        record(1, of(10, "s"), {"value": None, "unit": "s"}, sequence="a"),
        record(2, 3.5, sequence="b") | {"machine": "egret"},
        {"machine": "heron", "started": "2026-10-05T22:00:00Z", "sequence": "plain", "parameters": {"a": 1}},
        record(5, sequence="e"),
    ])  # fmt: skip
    found = seconds(store)
    assert (intake.refused, len(found)) == ([], 5)
    assert all(map(math.isnan, found))


def test_versions_of_one_sequence_have_their_own_steps(store: Store) -> None:
    store.take([record(0, of(1, "s"), of(2, "s")), record(1, of(1, "s")), record(2, of(1, "s"), of(4, "s"))])
    assert seconds(store) == [3.0, 1.0, 5.0]


def test_none(store: Store) -> None:
    assert seconds(store) == []
