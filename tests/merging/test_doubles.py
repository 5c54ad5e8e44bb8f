"""Shots that are there under both names of a machine: each counts once, also in the plan and the end of its scan."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
WRONG, RIGHT = "Heron", "heron"
Record = dict[str, Any]


def sweep(machine: str, first: int = 0, count: int = 8, **fields: Any) -> list[Record]:
    """Return shots 15 s apart along `a`."""
    return [
        {
            "machine": machine,
            "started": (START + timedelta(seconds=15 * k)).isoformat(),
            "sequence": "hold",
            "swept": ["a"],
            "parameters": {"a": float(k), "b": 1.0},
            "observables": {"n": 3.0 + k},
            **fields,
        }
        for k in range(first, first + count)
    ]


def found(store: Store) -> list[tuple[str | None, int, int, int]]:
    return [(scan.label, scan.shots, scan.set_aside, scan.axes[0].points) for scan in store.scans()]


@pytest.mark.parametrize("label", [None, "x"])
def test_they_do_not_fill_the_plan_of_a_scan(anywhere: str, label: str | None) -> None:
    said: Record = {"planned_shots": 8} | ({"scan": label} if label else {})
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, **said))
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert found(store) == [(label, 8, 8, 8)]
        assert store.scans()[0].complete
        store.take(sweep(RIGHT, 8, **said))
        assert found(store) == [(label, 8, 8, 8), (label, 8, 0, 8)]


@pytest.mark.parametrize("label", [None, "x"])
@pytest.mark.parametrize("first", [WRONG, RIGHT])
def test_they_neither_end_a_scan_nor_follow_its_end(anywhere: str, label: str | None, first: str) -> None:
    said: Record = {"scan": label} if label else {}
    with open_store(anywhere) as store:
        for machine in (first, WRONG if first == RIGHT else RIGHT):
            records = sweep(machine, **said)
            records[-1]["last"] = True
            store.take(records)
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert found(store) == [(label, 8, 8, 8)]
        store.take(sweep(RIGHT, 8, **said))
        assert found(store) == [(label, 8, 8, 8), (label, 8, 0, 8)]


def test_a_round_that_is_not_full_yet_goes_on(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x", planned_shots=12))
        store.merge_machines(WRONG, RIGHT, reason="x")
        for k in range(8, 12):
            store.take(sweep(RIGHT, k, 1, scan="x", planned_shots=12))
        assert found(store) == [("x", 12, 8, 12)]
        store.put_back(store.shots(set_aside=True)["uid"].tolist())
        assert found(store) == [("x", 20, 0, 12)]


@pytest.mark.parametrize("corrected", [WRONG, RIGHT])
def test_a_corrected_shot_is_the_same_shot_and_its_correction_holds(anywhere: str, corrected: str) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x"))
        uid = store.shots(machine=corrected)["uid"][2]
        store.correct([uid], {"a": 2.5}, "misread")
        assert store.merge_machines(WRONG, RIGHT, reason="x").doubles == 8
        assert store.shots(["a"])["a"].tolist() == [0, 1, 2.5, 3, 4, 5, 6, 7]
        assert store.take([*sweep(WRONG, scan="x"), *sweep(RIGHT, scan="x")]).known == 16
