"""Readings of sensors against a row a reading by raw sqlite3, in one process: `tests/bench/sensors.py [READINGS]`.

Prints CPU seconds of taking, with their ratio to `executemany` of (sensor, time, value) into a table of its own with
that key, sizes, memory, and what it costs to lay a year of one reading a second beside 100,000 shots.
"""

from __future__ import annotations

import json
import sqlite3
import sys
import tempfile
import time
import tracemalloc
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from nightfold import open_store
from nightfold.sensors.keeping import Series, keep_readings
from nightfold.sensors.packing import HOUR_US, pack
from nightfold.sensors.taking import BATCH
from nightfold.store import Store

START = datetime(2026, 1, 1, tzinfo=UTC)
YEAR_S = 365 * 86400
SHOTS = 100_000


def cpu(action: Callable[[], object]) -> float:
    """Return the CPU seconds of an action."""
    begun = time.process_time()
    action()
    return time.process_time() - begun


def write_lines(path: Path, moments: int) -> None:
    """Write four sensors a second as JSON lines."""
    rng = np.random.default_rng(1)
    room = np.round(21.3 + 0.02 * rng.normal(size=moments), 2).tolist()
    pressure = (3.1e-11 * (1 + 0.03 * rng.normal(size=moments))).tolist()
    laser = np.round(1.2 + 0.003 * rng.normal(size=moments), 4).tolist()
    late = rng.integers(5, 25, moments).tolist()
    with path.open("w", encoding="utf-8") as file:
        for k in range(moments):
            readings = {
                "room": {"value": room[k], "unit": "degC"}, "pressure": {"value": pressure[k], "unit": "mbar"},
                "laser": laser[k], "coil": round(35 + room[k] / 10, 1),
            }  # fmt: skip
            at = (START + timedelta(seconds=k, milliseconds=late[k])).isoformat()
            file.write(json.dumps({"machine": "bench", "at": at, "readings": readings}) + "\n")


def raw_seconds(path: Path, folder: Path) -> float:
    """Return the CPU seconds of inserting a row a reading; reading the file is not counted."""
    names = {"room": 1, "pressure": 2, "laser": 3, "coil": 4}
    rows = []
    for line in path.read_text(encoding="utf-8").splitlines():
        record = json.loads(line)
        at_us = round(datetime.fromisoformat(record["at"]).timestamp() * 1e6)
        for name, value in record["readings"].items():
            rows.append((names[name], at_us, value["value"] if isinstance(value, dict) else value))
    raw = sqlite3.connect(folder / f"raw-{time.monotonic_ns()}.sqlite", isolation_level=None)
    raw.execute("PRAGMA journal_mode=WAL")
    raw.execute("PRAGMA synchronous=FULL")
    raw.execute(
        "CREATE TABLE r (sensor INTEGER, at_us INTEGER, value REAL, PRIMARY KEY (sensor, at_us)) WITHOUT ROWID"
    )

    def insert() -> None:
        size = 4 * BATCH
        for begin in range(0, len(rows), size):
            raw.execute("BEGIN IMMEDIATE")
            raw.executemany("INSERT INTO r VALUES (?, ?, ?)", rows[begin : begin + size])
            raw.execute("COMMIT")

    spent = cpu(insert)
    raw.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    (size,) = raw.execute("SELECT page_count * page_size FROM pragma_page_count, pragma_page_size").fetchone()
    print(f"  a row a reading: {1e6 * spent / len(rows):.2f} us and {size / len(rows):.1f} bytes a reading")
    return spent


def taking(folder: Path, moments: int) -> None:
    """Print what taking costs."""
    path = folder / "readings.jsonl"
    write_lines(path, moments)
    count = 4 * moments
    print(f"{count} readings of 4 sensors, JSON lines:")
    floor = taken = again = float("inf")
    for turn in range(3):  # in turns, for the machine's speed drifts
        with open_store(folder / f"take-{turn}.sqlite", create=True) as store:
            taken = min(taken, cpu(lambda: store.take_sensor_file(path)))
            again = min(again, cpu(lambda: store.take_sensor_file(path)))
        floor = min(floor, raw_seconds(path, folder))
    size = (folder / "take-0.sqlite").stat().st_size
    for what, spent in (("taken", taken), ("taken again", again)):
        print(
            f"  {what}, decoding included: {1e6 * spent / count:.2f} us a reading, {spent / floor:.1f} x raw"
        )
    print(f"  size {size / count:.2f} bytes a reading")
    tracemalloc.start()
    with open_store(folder / "memory.sqlite", create=True) as store:
        store.take_sensor_file(path)
    print(f"  peak of Python memory {tracemalloc.get_traced_memory()[1] / 1e6:.0f} MB")
    tracemalloc.stop()


def sizes() -> None:
    """Print bytes a reading of an hour, packed, for clocks and values of several kinds."""
    rng = np.random.default_rng(2)
    steady = np.arange(3600) * 1_000_000
    clocks = {
        "exact seconds": steady,
        "ms, late by 5 to 25 ms": steady + rng.integers(5, 25, 3600) * 1000,
        "us, late by 5 to 25 ms": steady + rng.integers(5000, 25000, 3600),
    }
    drifting = 21.3 + 0.3 * np.sin(2 * np.pi * np.arange(3600) / 3600) + 0.02 * rng.normal(size=3600)
    values = {
        "steps of 0.01": np.round(drifting, 2),
        "3 digits, 3 % noise": np.array(
            [float(f"{v:.3g}") for v in 3.1e-11 * (1 + 0.03 * rng.normal(size=3600))]
        ),
        "full precision": drifting,
    }
    for clock, at in clocks.items():
        for kind, read in values.items():
            size = len(pack(at.astype(np.uint32), read)) / 3600
            print(
                f"  {clock}; {kind}: {size:.2f} bytes a reading, {size * YEAR_S / 1e6:.0f} MB a year at 1/s"
            )


def fill(store: Store) -> None:
    """Put a year of one reading a second and 100,000 shots over it into a store."""
    store.take_sensors([{"machine": "bench", "at": START, "readings": {"room": 21.0}}])
    rng = np.random.default_rng(3)
    begin = int(START.timestamp()) * 1_000_000
    for day in range(365):
        at_us = begin + (np.arange(86400) + day * 86400) * 1_000_000 + rng.integers(1, 20, 86400) * 1000
        series = Series(at_us, np.round(21.3 + 0.02 * rng.normal(size=86400), 2))
        with store._session.writing() as connection:
            kept = {begin // HOUR_US: Series(np.array([begin]), np.array([21.0]))} if day == 0 else {}
            keep_readings(connection, 1, kept, series)
    gap = YEAR_S / SHOTS
    store.take(
        {
            "machine": "bench", "sequence": "hold", "started": (START + timedelta(seconds=gap * k)).isoformat(),
            "parameters": {"hold_time": 1.0}, "observables": {"atoms": 1e5},
        }
        for k in range(SHOTS)
    )  # fmt: skip


def aligning(folder: Path) -> None:
    """Print what it costs to lay a year of a sensor beside shots, and to chart it."""
    with open_store(folder / "year.sqlite", create=True) as store:
        fill(store)
        bare = cpu(lambda: store.shots(observables=["atoms"]))
        print(f"{SHOTS} shots over a year of one reading a second (without the sensor {bare:.2f} s):")
        for align in ("nearest", "mean"):
            spent = cpu(lambda: store.shots(observables=["atoms"], sensors=["room"], align=align)) - bare  # noqa: B023
            print(f"  {align}: {spent:.2f} s more, {1e6 * spent / SHOTS:.0f} us a shot")
        few = cpu(lambda: store.shots(sensors=["room"], since="2026-06-01", until="2026-06-02"))
        print(f"  the shots of one day: {few:.3f} s")
        print(f"  the year in 100 bins: {cpu(lambda: store.sensor_bins('room')):.2f} s")
        print(
            f"  one hour of it: {1e3 * cpu(lambda: store.sensor('room', '2026-06-01T00', '2026-06-01T01')):.1f} ms"
        )


def main() -> None:
    """Print all."""
    with open_store(Path(tempfile.mkdtemp()) / "warm.sqlite", create=True) as store:
        store.take_sensors([{"machine": "m", "at": START, "readings": {"a": {"value": 1.0, "unit": "K"}}}])
    readings = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    with tempfile.TemporaryDirectory() as folder:
        taking(Path(folder), readings // 4)
        print("an hour of one sensor, packed:")
        sizes()
        aligning(Path(folder))


if __name__ == "__main__":
    main()
