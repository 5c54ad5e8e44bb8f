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


@pytest.mark.parametrize("by_uid", [False, True])
@pytest.mark.parametrize("corrected", [None, WRONG, RIGHT])
def test_a_late_reading_of_the_one_set_aside_reaches_the_one_that_counts(
    anywhere: str, by_uid: bool, corrected: str | None
) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x"))
        if corrected:
            store.correct([store.shots(machine=corrected)["uid"][2]], {"a": 2.5}, "misread")
        store.merge_machines(WRONG, RIGHT, reason="x")
        shots = store.shots(set_aside=True)
        aside = [uid for uid in shots["uid"][4:6] if store.shot(uid).set_aside]
        assert len(aside) == 1
        late = {"observables": {"n": 70.0, "m": 7.0}, "derivation": "second look"}
        name = RIGHT if corrected == WRONG else WRONG
        record = {"uid": aside[0], **late} if by_uid else sweep(name, 2, 1, scan="x")[0] | late
        outcome = store.take([record])
        assert (outcome.amended, outcome.refused) == (1, [])
        assert store.shots((), ["n", "m"])["n"].tolist() == [3, 4, 70, 6, 7, 8, 9, 10]
        assert store.shots((), ["n", "m"])["m"][2] == 7
        assert store.shots((), ["n"], set_aside=True)["n"].tolist().count(70) == 2
        assert store.take([record, *sweep(WRONG, scan="x"), *sweep(RIGHT, scan="x")]).known == 17
        assert store.shots((), ["n"])["n"][2] == 70


@pytest.mark.parametrize("label", [None, "x"])
def test_what_the_record_of_the_one_set_aside_says_later_holds_for_the_one_that_counts(
    anywhere: str, label: str | None
) -> None:
    said: Record = {"scan": label} if label else {}
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, **said))
        store.merge_machines(WRONG, RIGHT, reason="x")
        store.take(sweep(WRONG, 7, 1, **said, last=True))
        store.take(sweep(WRONG, 3, 1, **said, failed="no atoms"))
        store.take(sweep(RIGHT, 8, **said))
        assert found(store) == [(label, 7, 9, 8), (label, 8, 0, 8)]


def test_the_last_shot_of_one_label_does_not_end_another(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(sweep(WRONG, scan="typo"))
        store.take(sweep(RIGHT, scan="x"))
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.take(sweep(WRONG, 7, 1, scan="typo", last=True)).amended == 1
        store.take(sweep(RIGHT, 8, scan="x"))
        assert ("x", 16, 0, 16) in found(store)


def test_a_reading_that_the_one_that_counts_had_already_does_not_come_back(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x"))
        store.merge_machines(WRONG, RIGHT, reason="x")
        counting = store.shots()["uid"][2]
        (aside,) = set(store.shots(set_aside=True)["uid"][4:6]) - {counting}
        for value in (70.0, 71.0):
            store.take([{"uid": counting, "observables": {"n": value}, "derivation": "a"}])
        outcome = store.take([{"uid": aside, "observables": {"n": 70.0}, "derivation": "a"}])
        assert (outcome.amended, outcome.refused) == (1, [])
        assert store.shots((), ["n"])["n"][2] == 71


def test_one_that_was_put_back_counts_for_itself(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x"))
        store.merge_machines(WRONG, RIGHT, reason="x")
        store.put_back(store.shots(set_aside=True)["uid"].tolist())
        store.take([sweep(WRONG, 2, 1, scan="x")[0] | {"observables": {"n": 70.0}}])
        assert sorted(store.shots((), ["n"])["n"].tolist())[-2:] == [10, 70]


def test_shots_of_one_time_that_differ_are_told_apart(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for machine in (WRONG, RIGHT):
            store.take(sweep(machine, scan="x"))
        store.take([sweep(RIGHT, 2, 1, scan="x")[0] | {"uid": "other", "parameters": {"a": 2.0, "b": 3.0}}])
        store.merge_machines(WRONG, RIGHT, reason="x")
        store.take([sweep(WRONG, 2, 1, scan="x")[0] | {"observables": {"n": 70.0}}])
        assert store.shot("other").observables["n"].value == 5
        assert store.shots((), ["n"])["n"].tolist().count(70) == 1
