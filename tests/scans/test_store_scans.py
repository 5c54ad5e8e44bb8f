"""Scans in the store: rounds of labels, folding of the rest, whatever the order in which shots arrive."""

from __future__ import annotations

import itertools
import os
from collections.abc import Iterable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold import Store, open_store
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.scans.keeping import settle_axes

MORE = int(os.environ.get("NIGHTFOLD_MORE_EXAMPLES", "1"))

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
_numbers = itertools.count()


def shot(
    seconds: float, *, label: str | None = None, sequence: str = "hold", **fields: Any
) -> dict[str, Any]:
    """Return a record with a swept current and a resting hold time."""
    parameters = {
        "coil_current": 60.0,
        "hold_time": {"value": 120, "unit": "ms"},
        **fields.pop("parameters", {}),
    }
    record = {
        "machine": "heron",
        "started": (START + timedelta(seconds=seconds)).isoformat(),
        "sequence": sequence,
        "parameters": parameters,
        "observables": {"atom_number": {"value": 1e5, "stderr": 3e3}},
        **fields,
    }
    return record | ({"scan": label} if label else {})


def sweep(
    first: float, values: Iterable[Any], name: str = "coil_current", **fields: Any
) -> list[dict[str, Any]]:
    """Return shots 15 s apart that take a parameter through values."""
    extra = fields.pop("parameters", {})
    return [
        shot(first + 15 * k, parameters={**extra, name: float(value)}, **fields)
        for k, value in enumerate(values)
    ]


def fresh(folder: Path) -> Store:
    return open_store(folder / f"store-{next(_numbers)}.sqlite", create=True)


def taken(folder: Path, records: Iterable[dict[str, Any]], batch: int = 1000) -> Store:
    store = fresh(folder)
    rest = list(records)
    while rest:
        outcome = store.take(rest[:batch])
        assert not outcome.refused, outcome.refused
        rest = rest[batch:]
    return store


def layout(store: Store) -> list[tuple[Any, ...]]:
    """Return what every scan is, without ids."""
    return [
        (scan.label, scan.round, scan.origin, scan.sequence, [axis.parameter for axis in scan.axes], scan.shots,
         scan.first, scan.last)
        for scan in store.scans()
    ]  # fmt: skip


GRID = np.linspace(58, 64, 13)


def test_label_again_within_a_day_resumes_and_later_opens_a_round(tmp_path: Path) -> None:
    day = 86400
    records = [
        *sweep(0, GRID, label="loss", swept=["coil_current"]),
        *sweep(day - 3600, GRID, label="loss", swept=["coil_current"]),
        *sweep(3 * day, GRID, label="loss", swept=["coil_current"]),
    ]
    with taken(tmp_path, records) as store:
        assert [(scan.key, scan.shots) for scan in store.scans()] == [("loss#1", 26), ("loss#2", 13)]
        assert store.scan("loss").round == 2
        assert store.scan("loss#1").shots == 26


def test_another_swept_parameter_opens_a_round(tmp_path: Path) -> None:
    records = [
        *sweep(0, GRID, label="look", swept=["coil_current"]),
        *sweep(600, GRID, "hold_time", label="look", swept=["hold_time"]),
    ]
    with taken(tmp_path, records) as store:
        axes = [[axis.parameter for axis in scan.axes] for scan in store.scans()]
        assert axes == [["coil_current"], ["hold_time"]]


def test_last_and_planned_shots_complete_a_round(tmp_path: Path) -> None:
    ended = sweep(0, GRID, label="a", swept=["coil_current"])
    ended[-1]["last"] = True
    planned = [r | {"planned_shots": 13} for r in sweep(1000, GRID, label="b", swept=["coil_current"])]
    again = sweep(2000, GRID, label="a", swept=["coil_current"]) + [
        r | {"planned_shots": 13} for r in sweep(3000, GRID, label="b", swept=["coil_current"])
    ]
    with taken(tmp_path, ended + planned) as store:
        assert [scan.complete for scan in store.scans()] == [True, True]
        store.take(again)
        assert [scan.key for scan in store.scans()] == ["a#1", "b#1", "a#2", "b#2"]


def test_a_running_scan_is_not_complete(tmp_path: Path) -> None:
    begun = (datetime.now(UTC) - START).total_seconds() - 15 * 12
    with taken(tmp_path, sweep(begun, GRID, label="now", swept=["coil_current"])) as store:
        assert not store.scan("now").complete
    with taken(tmp_path, sweep(0, GRID, label="long ago", swept=["coil_current"])) as store:
        assert store.scan("long ago").complete


def test_interleaved_labels_of_one_sequence_stay_apart(tmp_path: Path) -> None:
    low = sweep(0, GRID, label="low", swept=["coil_current"])
    high = sweep(7, GRID + 10, label="high", swept=["coil_current"])
    with taken(tmp_path, [record for pair in zip(low, high, strict=True) for record in pair]) as store:
        assert [(scan.key, scan.axes[0].low) for scan in store.scans()] == [("low#1", 58.0), ("high#1", 68.0)]


def test_reference_shots_neither_end_nor_join_a_scan(tmp_path: Path) -> None:
    records = sweep(0, GRID)
    records.insert(6, shot(82, reference=True))
    with taken(tmp_path, records) as store:
        (scan,) = store.scans()
        assert (scan.shots, scan.origin) == (13, "found")


def test_failed_shots_are_kept_and_set_aside(tmp_path: Path) -> None:
    records = sweep(0, GRID)
    records[4] |= {"failed": "no atoms", "observables": {"atom_number": None}}
    with taken(tmp_path, records) as store:
        (scan,) = store.scans()
        assert (scan.shots, scan.set_aside) == (12, 1)
        assert scan.dataset().sizes == {"coil_current": 12}
        whole = scan.dataset(set_aside=True)
        assert whole.sizes == {"coil_current": 13}
        assert int(whole.set_aside.sum()) == 1


def test_an_axis_may_be_followed_by_another_parameter(tmp_path: Path) -> None:
    records = sweep(0, GRID, label="line", swept=["coil_current"])
    for record in records:
        record["parameters"]["synth"] = 3.0 + 1.4 * record["parameters"]["coil_current"]
    with taken(tmp_path, records) as store:
        scan = store.scan("line")
        assert [axis.parameter for axis in scan.axes] == ["coil_current"]
        assert scan.followers == {"synth": "coil_current"}
        assert scan.dataset().synth.dims == ("coil_current",)
        assert store.edits().empty


@given(st.permutations(range(39)), st.integers(1, 39))
@settings(max_examples=7 * MORE, deadline=None)
def test_order_of_arrival_cannot_change_rounds(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], batch: int
) -> None:
    records = [
        r
        for first in (0, 40 * 3600, 90 * 3600)
        for r in sweep(first, GRID, label="loss", swept=["coil_current"])
    ]
    folder = tmp_path_factory.mktemp("order")
    with taken(folder, records) as straight, taken(folder, [records[k] for k in order], batch) as shuffled:
        assert layout(shuffled) == layout(straight)
        assert [scan.key for scan in straight.scans()] == ["loss#1", "loss#2", "loss#3"]


def test_a_late_shot_joins_two_rounds(tmp_path: Path) -> None:
    hour = 3600
    records = [
        *sweep(0, GRID, label="loss", swept=["coil_current"]),
        *sweep(40 * hour, GRID, label="loss", swept=["coil_current"]),
    ]
    with taken(tmp_path, records) as store:
        assert len(store.scans()) == 2
        store.fit("loss#2", "gaussian", observable="atom_number")
        store.take([shot(20 * hour, label="loss", swept=["coil_current"])])
        assert [(scan.key, scan.shots) for scan in store.scans()] == [("loss#1", 27)]
        (kept,) = store.fits()
        assert kept.scan_key == "loss#1"
        assert kept.stale


_MIXED = [
    *sweep(0, np.random.default_rng(1).permutation(GRID)),
    *sweep(1000, np.linspace(20, 400, 20), "hold_time", parameters={"coil_current": 61.0}),
    *sweep(3000, GRID, sequence="other"),
    *sweep(9000, np.random.default_rng(2).permutation(np.repeat(GRID, 2)), parameters={"bias": 0.3}),
]


@given(st.permutations(range(len(_MIXED))), st.integers(1, 40))
@settings(max_examples=7 * MORE, deadline=None)
def test_order_of_arrival_cannot_change_found_scans(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], batch: int
) -> None:
    folder = tmp_path_factory.mktemp("order")
    with taken(folder, _MIXED) as straight, taken(folder, [_MIXED[k] for k in order], batch) as shuffled:
        assert layout(straight) == layout(shuffled)
        assert [(s.sequence, s.axes[0].parameter, s.shots) for s in straight.scans()] == [
            ("hold", "coil_current", 13),
            ("hold", "hold_time", 20),
            ("other", "coil_current", 13),
            ("hold", "coil_current", 26),
        ]
        pair = (store.edits().drop(columns="old").to_dict("records") for store in (straight, shuffled))
        assert next(pair) == next(pair)


def test_a_found_scan_keeps_its_id_while_it_grows(tmp_path: Path) -> None:
    records = sweep(0, np.random.default_rng(3).permutation(np.repeat(GRID, 3)))
    with taken(tmp_path, records[:20]) as store:
        (before,) = store.scans()
        for record in records[20:]:
            store.take([record])
        (after,) = store.scans()
        assert (after.id, after.shots) == (before.id, 39)


def test_keys(tmp_path: Path) -> None:
    records = [
        *sweep(0, GRID, label="loss", swept=["coil_current"]),
        *sweep(1000, GRID, label="2", swept=["coil_current"]),
        *sweep(2000, GRID, label="loss", swept=["coil_current"], sequence="other"),
    ]
    with taken(tmp_path, records) as store:
        assert store.scan("2").label == "2"
        assert store.scan(2).id == 2
        with pytest.raises(
            ChoiceNeeded, match=r"use this label; name it by id: 1 \(heron, hold\), 3 \(heron, other\)"
        ):
            store.scan("loss")
        with pytest.raises(NotFound, match=r"scan 'lose'.*it has loss"):
            store.scan("lose")
        with pytest.raises(NotFound, match="scan 99"):
            store.scan(99)


def test_two_axes_in_random_order_with_holes_and_repeats(tmp_path: Path) -> None:
    points = [(c, h) for c in (60.0, 61.0, 62.0) for h in (50.0, 100.0)]
    chosen = [points[k] for k in (3, 0, 5, 1, 4, 0)]  # one point never, one twice
    records = [
        shot(
            15 * k,
            label="map",
            swept=["coil_current", "hold_time"],
            parameters={"coil_current": c, "hold_time": {"value": h, "unit": "ms"}},
        )
        for k, (c, h) in enumerate(chosen)
    ]
    with taken(tmp_path, records) as store:
        dataset = store.scan("map").dataset()
        assert dict(dataset.sizes) == {"coil_current": 3, "hold_time": 2, "repeat": 2}
        assert int(dataset.atom_number.notnull().sum()) == 6
        assert bool(dataset.atom_number.sel(coil_current=61.0, hold_time=50.0).isnull().all())
        assert dataset.hold_time.attrs["units"] == "ms"


def test_a_record_that_does_not_say_what_is_swept_sweeps_what_the_others_do(tmp_path: Path) -> None:
    records = sweep(0, np.repeat(GRID, 2), label="loss", swept=["coil_current"])
    for record in records[::3]:
        del record["swept"]
    with taken(tmp_path, records) as straight, taken(tmp_path, records[::-1], 4) as backwards:
        (scan,) = straight.scans()
        assert (scan.key, scan.shots, [axis.parameter for axis in scan.axes]) == (
            "loss#1",
            26,
            ["coil_current"],
        )
        assert layout(backwards) == layout(straight)


def test_an_edit_within_a_label_that_declares_nothing_is_an_edit(tmp_path: Path) -> None:
    records = sweep(0, np.random.default_rng(4).permutation(np.repeat(GRID, 2)), label="loss")
    for record in records[9:]:
        record["parameters"]["bias"] = 2.0
    for record in records[:9]:
        record["parameters"]["bias"] = 1.0
    with taken(tmp_path, records) as store:
        assert [axis.parameter for axis in store.scan("loss").axes] == ["coil_current"]
        assert store.edits()[["parameter", "old", "new"]].values.tolist() == [["bias", 1.0, 2.0]]


@pytest.mark.parametrize("label", ["loss", None])
def test_a_counter_or_a_thermometer_among_the_parameters_is_no_axis(
    tmp_path: Path, label: str | None
) -> None:
    rng = np.random.default_rng(5)
    records = sweep(0, rng.permutation(np.repeat(GRID, 2)), label=label)
    for number, record in enumerate(records):
        record["parameters"] |= {"counter": number, "room": 21 + float(rng.normal())}
    with taken(tmp_path, records) as store:
        (scan,) = store.scans()
        assert [axis.parameter for axis in scan.axes] == ["coil_current"]
        assert scan.dataset().sizes == {"coil_current": 13, "repeat": 2}
        assert store.edits().empty


def test_a_long_round_is_not_read_again_with_every_shot(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    looks: list[int] = []

    def counted(connection: Any, scan_id: int, swept: Any) -> None:
        looks.append(scan_id)
        settle_axes(connection, scan_id, swept)

    monkeypatch.setattr("nightfold.scans.assigning.settle_axes", counted)
    with fresh(tmp_path) as store:
        for record in sweep(0, np.resize(GRID, 400), label="loss", swept=["coil_current"]):
            store.take([record])
        assert len(looks) < 100


def test_a_late_shot_leaves_the_other_rounds_of_a_label_alone(tmp_path: Path) -> None:
    day = 86400
    first = [
        r | {"planned_shots": 26} for r in sweep(0, np.resize(GRID, 26), label="loss", swept=["coil_current"])
    ]
    second = [r | {"planned_shots": 13} for r in sweep(3 * day, GRID, label="loss", swept=["coil_current"])]
    third = [r | {"planned_shots": 13} for r in sweep(6 * day, GRID, label="loss", swept=["coil_current"])]
    with taken(tmp_path, [*first, *second[:5], *second[6:], *third]) as store:
        for key in ("loss#1", "loss#2", "loss#3"):
            store.fit(key, "gaussian", observable="atom_number")
        store.take([second[5]])
        assert [(scan.key, scan.shots) for scan in store.scans()] == [
            ("loss#1", 26),
            ("loss#2", 13),
            ("loss#3", 13),
        ]
        assert [(fit.scan_key, fit.stale) for fit in store.fits()] == [
            ("loss#1", False), ("loss#2", True), ("loss#3", False),
        ]  # fmt: skip


def test_last_and_planned_shots_end_scans_without_a_label_too(tmp_path: Path) -> None:
    said_last = sweep(0, GRID, swept=["coil_current"])
    said_last[-1]["last"] = True
    planned = [r | {"planned_shots": 13} for r in sweep(195, GRID, swept=["coil_current"])]
    more = sweep(390, GRID, swept=["coil_current"])
    with taken(tmp_path, [*said_last, *planned, *more]) as store:
        assert [scan.shots for scan in store.scans()] == [13, 13, 13]
        assert [scan.complete for scan in store.scans()][:2] == [True, True]


def test_last_may_be_said_afterwards(tmp_path: Path) -> None:
    begun = (datetime.now(UTC) - START).total_seconds() - 15 * 12
    records = [
        r | {"uid": str(k)} for k, r in enumerate(sweep(begun, GRID, label="now", swept=["coil_current"]))
    ]
    with taken(tmp_path, records) as store:
        assert not store.scan("now").complete
        assert store.take([records[-1] | {"last": True}]).amended == 1
        assert store.scan("now").complete


_SLOW = [
    shot(seconds, parameters={"coil_current": float(GRID[k % 13])}, swept=["coil_current"])
    for k, seconds in enumerate(
        [*(60 * k + (340 if k >= 30 else 0) for k in range(60)), *(6000 + 15 * k for k in range(120))]
    )
]


@given(st.permutations(range(0, len(_SLOW), 6)), st.integers(5, 60))
@settings(max_examples=4 * MORE, deadline=None)
def test_what_a_pause_is_does_not_depend_on_the_order_of_arrival(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], batch: int
) -> None:
    folder = tmp_path_factory.mktemp("pauses")
    shuffled = [_SLOW[k + j] for k in order for j in range(6)]
    with taken(folder, _SLOW) as straight, taken(folder, shuffled, batch) as mixed:
        assert [scan.shots for scan in straight.scans()] == [60, 120]
        assert layout(mixed) == layout(straight)


def test_a_fit_may_name_its_scan_by_a_whole_number_of_numpy(tmp_path: Path) -> None:
    with taken(tmp_path, sweep(0, GRID, label="loss", swept=["coil_current"])) as store:
        scan = store.scan(np.int64(1))  # type: ignore[arg-type]
        assert scan.key == "loss#1"
        store.fit(np.int64(1), "gaussian", observable="atom_number")  # type: ignore[arg-type]
