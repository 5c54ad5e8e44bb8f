"""Readings taken against the simplest model there is: a dict, record by record."""

from __future__ import annotations

import math
import shutil
from datetime import UTC, datetime, timedelta
from pathlib import Path

from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.opening import open_store
from nightfold.sensors import taking

START = datetime(2026, 10, 5, 19, 59, 57, tzinfo=UTC)
READINGS = st.dictionaries(
    st.sampled_from("abc"), st.sampled_from([0.0, 1.0, math.nan, math.inf]), max_size=3
)
RECORDS = st.lists(st.tuples(st.integers(0, 6), READINGS), max_size=30)


def key(value: float) -> str:
    return repr(value)


@settings(max_examples=60)
@given(records=RECORDS, most=st.integers(1, 12), parts=st.integers(1, 3))
def test_first_come_first_kept(
    tmp_path: Path, empty_store: Path, records: list[tuple[int, dict[str, float]]], most: int, parts: int
) -> None:
    model: dict[tuple[str, int], str] = {}
    refused, known, new = [], 0, 0
    for number, (second, readings) in enumerate(records, 1):
        said = {(name, second): key(value) for name, value in readings.items()}
        if any(model.get(place, value) != value for place, value in said.items()):
            refused.append(number)
            continue
        known += sum(place in model for place in said)
        new += sum(place not in model for place in said)
        model |= said
    path = tmp_path / "store.sqlite"
    shutil.copy(empty_store, path)
    stated = [
        {"machine": "m", "at": START + timedelta(seconds=second), "readings": readings}
        for second, readings in records
    ]
    before, taking.BATCH = taking.BATCH, most
    try:
        with open_store(path) as store:
            step = max(1, len(stated) // parts)
            counts, lines = [0, 0], []
            for start in range(0, len(stated), step):
                intake = store.take_sensors(stated[start : start + step])
                counts[0] += intake.new
                counts[1] += intake.known
                lines += [start + item.line for item in intake.refused]
            assert (counts, lines) == ([new, known], refused)
            names = store.sensors()["name"].tolist()
            assert names == sorted({name for name, _ in model})
            for name in names:
                frame = store.sensor(name)
                seconds = (frame["at"] - START).dt.total_seconds().astype(int)
                found = {(name, s): key(v) for s, v in zip(seconds, frame["value"].tolist(), strict=True)}
                assert found == {place: value for place, value in model.items() if place[0] == name}
    finally:
        taking.BATCH = before
