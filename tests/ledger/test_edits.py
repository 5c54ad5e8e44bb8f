"""Edits: what a person changed, and nothing else."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import count
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from nightfold.errors import NotFound
from nightfold.opening import open_store
from nightfold.store import Store

Record = dict[str, Any]


def shots(settings: Iterable[Record], start: int = 0, step_s: int = 20, **fields: Any) -> list[Record]:
    """Return a record for each of the settings, 20 s apart, from `start` seconds into the evening."""
    begin = pd.Timestamp("2026-10-05T20:00:00Z")
    return [
        {"machine": "heron", "sequence": "hold", "parameters": dict(own),
         "started": (begin + pd.Timedelta(seconds=start + number * step_s)).isoformat(), **fields}
        for number, own in zip(count(), settings, strict=False)
    ]  # fmt: skip


def told(store: Store, **narrow: Any) -> list[tuple[str, Any, Any]]:
    frame = store.edits(**narrow)
    return list(zip(frame.parameter, frame.old, frame.new, strict=True))


CALM = {"coil": 1.5, "mode": "x", "on": True, "hold": 10}


def test_an_edit_has_time_values_and_sequence(store: Store) -> None:
    store.take(shots([CALM] * 30))
    store.take(shots([{**CALM, "coil": 1.6, "mode": "y"}] * 30, 600))
    store.take(shots([{**CALM, "coil": 1.6, "mode": "y", "on": False}] * 3, 1200))
    frame = store.edits()
    assert list(frame.columns) == ["at", "parameter", "old", "new", "sequence"]
    assert [str(at) for at in frame["at"]] == ["2026-10-05 20:10:00+00:00"] * 2 + [
        "2026-10-05 20:20:00+00:00"
    ]
    assert told(store) == [("coil", 1.5, 1.6), ("mode", "x", "y"), ("on", True, False)]
    assert set(frame.sequence) == {"hold"}


def test_no_edits(store: Store) -> None:
    assert store.edits().empty
    store.take(shots([CALM] * 3))
    assert list(store.edits().columns) == ["at", "parameter", "old", "new", "sequence"]
    with pytest.raises(NotFound, match="machine 'egret'"):
        store.edits(machine="egret")


def test_swept_parameters_are_not_edited(store: Store) -> None:
    sweep = [{**CALM, "hold": 10 * (n % 6)} for n in range(36)]
    store.take([*shots([CALM] * 25), *shots(sweep, 500, scan="x", swept=["hold"]), *shots([CALM] * 25, 1300)])
    assert told(store) == []


@pytest.mark.parametrize("size", [5, 500])
def test_axes_found_by_folding_and_followers_are_not_edited(store: Store, size: int) -> None:
    sweep = [{**CALM, "hold": 1 + n * 7 % 12, "delay": 2.0 * (1 + n * 7 % 12)} for n in range(36)]
    rest = {**CALM, "hold": 1, "delay": 2.0}
    records = [*shots([rest] * 25), *shots(sweep, 5000), *shots([rest] * 25, 10000)]
    for start in range(0, len(records), size):
        store.take(records[start : start + size])
    (scan,) = store.scans()
    assert [axis.parameter for axis in scan.axes] in (["hold"], ["delay"])
    assert told(store) == []


def test_slow_axes_that_rest_for_many_shots(store: Store) -> None:
    """More than 20 shots a point: the axis then lies in value sets, and what stays after the scan is an edit."""
    sweep = [{**CALM, "hold": 10 + n // 30} for n in range(120)]
    records = [
        *shots([CALM] * 5),
        *shots(sweep, 100, scan="slow", swept=["hold"]),
        *shots([{**CALM, "hold": 13}] * 60, 2500),
    ]
    store.take(records)
    assert told(store) == [("hold", 10, 13)]


def test_an_axis_that_rests_in_a_set_is_an_edit_when_the_scan_is_over(store: Store) -> None:
    sweep = [{**CALM, "hold": 10 + n // 30} for n in range(120)]
    store.take(
        [*shots([CALM] * 5), *shots(sweep, 100, scan="slow"), *shots([{**CALM, "hold": 13}] * 60, 2500)]
    )
    assert told(store) == [("hold", 10, 13)]
    assert str(store.edits()["at"][0]) == "2026-10-05 20:41:40+00:00"


def test_an_edit_while_a_scan_runs(store: Store) -> None:
    sweep = [{**CALM, "hold": n % 6, "coil": 1.5 if n < 20 else 1.7} for n in range(36)]
    store.take([*shots([{**CALM, "hold": 0}] * 3), *shots(sweep, 500, scan="x", swept=["hold"])])
    assert told(store) == [("coil", 1.5, 1.7)]


def test_the_same_edit_in_several_sequences_is_one(store: Store) -> None:
    for number, name in enumerate(["one", "two", "three"]):
        store.take(shots([CALM] * 30, number, sequence=name))
        store.take(shots([{**CALM, "coil": 2.0}] * 30, 600 + number, sequence=name))
    assert told(store) == [("coil", 1.5, 2.0)]
    assert list(store.edits().sequence) == ["one"]
    for number, name in enumerate(["one", "two"]):
        store.take(shots([CALM] * 3, 2000 + number, sequence=name))
        store.take(shots([{**CALM, "coil": 2.0}] * 3, 3000 + number, sequence=name))
    assert told(store) == [("coil", 1.5, 2.0), ("coil", 2.0, 1.5), ("coil", 1.5, 2.0)]


def test_edits_of_each_machine(store: Store) -> None:
    for machine in ("heron", "egret"):
        store.take(shots([CALM] * 3, machine=machine))
        store.take(shots([{**CALM, "coil": 2.0}] * 3, 600, machine=machine))
    assert len(told(store)) == 2
    assert told(store, machine="egret") == [("coil", 1.5, 2.0)]


def test_edits_between_times(store: Store) -> None:
    for number in range(4):
        store.take(shots([{**CALM, "coil": float(number)}] * 3, 600 * number))
    assert told(store, since="2026-10-05T20:20:00Z") == [("coil", 1.0, 2.0), ("coil", 2.0, 3.0)]
    assert told(store, until="2026-10-05T20:20:00Z") == [("coil", 0.0, 1.0)]
    assert told(store, since="2026-10-06") == []


def test_reference_shots_and_untidy_values(store: Store) -> None:
    nan = float("nan")
    tidy: Record = {"a": 1, "b": nan, "c": 1}
    untidy: list[Record] = [
        {"a": 1, "b": nan},
        {"a": 1.0, "b": nan},
        tidy,
        {"a": 1, "b": nan, "c": None},
        tidy,
    ]
    store.take(shots(untidy))
    store.take(shots([tidy] * 3, 300, reference=True))
    assert told(store) == []


@pytest.mark.parametrize("order", ["reversed", "halves", "interleaved"])
def test_edits_do_not_depend_on_the_order_of_arrival(store: Store, tmp_path: Path, order: str) -> None:
    sweep = [{**CALM, "hold": n % 6, "coil": 1.5 if n < 40 else 1.7} for n in range(60)]
    records = [
        *shots([{**CALM, "coil": 1.0}] * 25), *shots([CALM] * 25, 600), *shots(sweep, 4000),
        *shots([{**CALM, "coil": 1.7, "hold": 33}] * 25, 12000), *shots([CALM] * 25, 20000, sequence="other"),
    ]  # fmt: skip
    store.take(records)
    with open_store(tmp_path / "other.sqlite", create=True) as other:
        arrived = {
            "reversed": records[::-1],
            "halves": records[len(records) // 2 :] + records[: len(records) // 2],
            "interleaved": records[::2] + records[1::2],
        }[order]
        for start in range(0, len(arrived), 23):
            other.take(arrived[start : start + 23])
        assert other.edits().astype(str).to_numpy().tolist() == store.edits().astype(str).to_numpy().tolist()
    assert ("coil", 1.0, 1.5) in told(store)
    assert ("coil", 1.5, 1.7) in told(store)


def test_edits_carry_units(store: Store) -> None:
    store.take(shots([{"hold": {"value": 5, "unit": "ms"}}, {"hold": {"value": 0.007, "unit": "s"}}]))
    assert told(store) == [("hold", 5.0, 7.0)]
    assert store.edits().attrs["units"] == {"hold": "ms"}
