"""Bulk taking against the same rows by raw sqlite3, in one process: `python tests/bench/take.py [SHOTS]`.

Prints CPU seconds and their ratios: the floor is `executemany` of exactly the rows that the store ended up with, into
the same tables with the same indexes, in batches of the same size.
"""

from __future__ import annotations

import json
import sqlite3
import sys
import tempfile
import time
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from nightfold import open_store
from nightfold.ledger.batches import BATCH

ROUNDS = 3
TABLES = ("value_set", "set_value", "shot", "shot_value", "reading")


def records(shots: int, *, labelled: bool = True, first: int = 0) -> list[dict[str, Any]]:
    """Return shots of 120 parameters and 8 observables, in scans of 100, counted from `first`; one is swept."""
    rng = np.random.default_rng(7 + first)
    start = datetime(2026, 3, 1, 20, tzinfo=UTC)
    constant = np.random.default_rng(7).normal(size=118)
    resting = {f"setting_{k:03d}": {"value": round(float(constant[k]), 4), "unit": "V"} for k in range(118)}
    made = []
    for k in range(first, first + shots):
        noise = rng.normal(size=8)
        parameters = {
            **resting,
            "coil_current": {"value": 58 + 0.1 * (k % 100), "unit": "A"},
            "imaging_axis": "x",
        }
        record = {
            "format": 1, "uid": f"shot-{k:08d}", "machine": "bench", "sequence": "hold",
            "started": (start + timedelta(seconds=15 * k)).isoformat(), "parameters": parameters,
            "observables": {
                f"reading_{j}": {"value": 1e5 * (1 + 0.03 * float(noise[j])), "stderr": 900.0} for j in range(8)
            },
        }  # fmt: skip
        if labelled:
            record |= {"scan": f"loss-{k // 100}", "swept": ["coil_current"]}
        made.append(record)
    return made


def cpu(action: Callable[[], object]) -> float:
    """Return the CPU seconds of an action."""
    begun = time.process_time()
    action()
    return time.process_time() - begun


def raw_seconds(store: Path, copy: Path) -> float:
    """Return the CPU seconds of putting the store's rows into the same tables with executemany."""
    source = sqlite3.connect(store)
    rows = {name: source.execute(f"SELECT * FROM {name}").fetchall() for name in TABLES}
    schema = [sql for (sql,) in source.execute("SELECT sql FROM sqlite_master WHERE sql IS NOT NULL")]
    keep = [sql for sql in schema if any(f" {name} " in f"{sql} ".replace("(", " ") for name in TABLES)]
    target = sqlite3.connect(copy, isolation_level=None)
    target.execute("PRAGMA journal_mode=WAL")
    target.execute("PRAGMA synchronous=FULL")
    for sql in keep:
        target.execute(sql)

    def insert() -> None:
        shots = len(rows["shot"])
        for start in range(0, shots, BATCH):
            target.execute("BEGIN IMMEDIATE")
            for name in TABLES:
                share = len(rows[name]) / shots
                part = rows[name][round(start * share) : round(min(start + BATCH, shots) * share)]
                if part:
                    target.executemany(f"INSERT INTO {name} VALUES ({', '.join('?' * len(part[0]))})", part)
            target.execute("COMMIT")

    return cpu(insert)


def main() -> None:
    """Print the table."""
    with open_store(Path(tempfile.mkdtemp()) / "warm.sqlite", create=True) as store:
        store.take(records(10))  # imports and the unit registry, once a process
    shots = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    with tempfile.TemporaryDirectory() as folder:
        for labelled in (True, False):
            made = records(shots, labelled=labelled)
            fresh = [
                json.loads(json.dumps(record)) for record in made
            ]  # no shared parts, as from a control program
            lines = Path(folder) / "records.jsonl"
            lines.write_text("".join(json.dumps(record) + "\n" for record in made), encoding="utf-8")
            taken = read = floor = float("inf")
            for turn in range(ROUNDS):  # in turns, for the machine's speed drifts
                where = Path(folder) / f"take-{labelled}-{turn}.sqlite"
                with open_store(where, create=True) as store:
                    taken = min(taken, cpu(lambda: store.take(fresh)))  # noqa: B023
                with open_store(Path(folder) / f"file-{labelled}-{turn}.sqlite", create=True) as store:
                    read = min(read, cpu(lambda: store.take_file(lines)))  # noqa: B023
                floor = min(floor, raw_seconds(where, Path(folder) / f"raw-{labelled}-{turn}.sqlite"))
            kind = "labelled, swept declared" if labelled else "unlabelled, found by folding"
            print(f"{shots} shots, {kind}: raw {1e6 * floor / shots:.0f} us a shot;")
            print(f"  Store.take of dicts, validation included  {taken / floor:.1f} x raw")
            print(f"  take_file of JSON lines, decoding included {read / floor:.1f} x raw")
            print(f"  size {where.stat().st_size / shots:.0f} bytes a shot")


if __name__ == "__main__":
    main()
