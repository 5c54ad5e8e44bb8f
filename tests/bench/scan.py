"""A 400-shot scan out of a large store into xarray, against the bare SQL: `python tests/bench/scan.py [SHOTS]`.

The floor fetches the same rows (shots, what moved, readings) with sqlite3 and nothing else. Prints CPU ratios, the size
of the store, and what taking one more shot costs there against an empty store. A million shots take ten minutes.
"""

from __future__ import annotations

import sqlite3
import sys
import tempfile
from pathlib import Path
from typing import Any

from take import cpu, records

from nightfold import open_store

SHOTS_A_SCAN = 400
SQL = (
    "SELECT * FROM shot WHERE scan_id = ? ORDER BY started_us",
    "SELECT v.* FROM shot_value v JOIN shot ON shot.id = v.shot_id WHERE shot.scan_id = ?",
    "SELECT r.* FROM reading r JOIN shot ON shot.id = r.shot_id WHERE shot.scan_id = ?",
)


def fill(where: Path, shots: int) -> None:
    """Make a store of that many shots, in scans of 400."""
    with open_store(where, create=True) as store:
        made = 0
        for part in range(0, shots, 20_000):
            batch = records(min(20_000, shots - part), first=part)
            for number, record in enumerate(batch):
                record["scan"] = f"loss-{(part + number) // SHOTS_A_SCAN}"
            made += store.take(batch).new
            print(f"\r{made} shots", end="", file=sys.stderr, flush=True)
        print(file=sys.stderr)


def best(action: Any, times: int = 7) -> float:
    """Return the least CPU seconds of several runs."""
    return min(cpu(action) for _ in range(times))


def main() -> None:
    """Print the figures."""
    shots = int(sys.argv[1]) if len(sys.argv) > 1 else 100_000
    with tempfile.TemporaryDirectory() as folder:
        where = Path(folder) / "large.sqlite"
        fill(where, shots)
        print(
            f"{shots} shots: {where.stat().st_size / 1e6:.0f} MB, {where.stat().st_size / shots:.0f} bytes a shot"
        )
        label = f"loss-{shots // SHOTS_A_SCAN // 2}"
        bare = sqlite3.connect(where)
        with open_store(where) as store:
            scan_id = store.scan(label).id
            floor = best(lambda: [bare.execute(sql, (scan_id,)).fetchall() for sql in SQL])
            whole = best(lambda: store.scan(label).dataset())
            table = best(lambda: store.scan(label).table())
            print(f"a scan of {SHOTS_A_SCAN} shots: bare SQL {1e3 * floor:.1f} ms;")
            print(f"  as a table {table / floor:.1f} x, as an xarray.Dataset {whole / floor:.1f} x")
            one = [records(1, first=shots + k)[0] | {"scan": "one more"} for k in range(20)]
            many = cpu(lambda: [store.take([record]) for record in one]) / len(one)
        with open_store(Path(folder) / "small.sqlite", create=True) as store:
            few = cpu(lambda: [store.take([record]) for record in one]) / len(one)
        print(f"one shot more costs {1e3 * many:.1f} ms, {many / few:.2f} x as in an empty store")


if __name__ == "__main__":
    main()
