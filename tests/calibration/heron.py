"""How often the fits of the demo hold its truths: ``python tests/calibration/heron.py [--seeds 50]``.

Plays the invented machine of the demo with other seeds, takes its shots, fits every scan that holds a stated number
with the defaults, and prints the share of truths inside the 68.27 % and 95 % intervals.
"""

from __future__ import annotations

import os
import sys
import tempfile
import time
from argparse import ArgumentParser
from collections import defaultdict
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from functools import partial
from pathlib import Path

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
from tests.calibration.tables import percent, set_table

from nightfold import open_store
from nightfold.simulator import write_campaign
from nightfold_cli.demo.truths import Found, find_truth

FIRST_SEED = 10_000
LEVELS = (0.6827, 0.95)


@dataclass(frozen=True)
class Held:
    """Whether the intervals of one fit hold its truth; pull is (value - truth) / stderr."""

    what: str
    inside: tuple[bool, bool]
    trusted: bool
    pull: float
    problem: str


def play(seed: int, nights: int) -> list[Held]:
    """Return what becomes of the truths of one campaign."""
    with tempfile.TemporaryDirectory() as folder:
        campaign = write_campaign(Path(folder), seed=seed, nights=nights)
        with open_store(Path(folder) / "heron.sqlite", create=True) as store:
            store.use_card(campaign.card)
            for path in campaign.files:
                store.take_file(path)
            return [_held(find_truth(store, truth, keep=False)) for truth in campaign.truths]


def _held(found: Found) -> Held:
    truth, estimate = found.truth, found.estimate
    name = truth.what.split(" (")[0]
    if estimate is None:
        return Held(name, (False, False), False, float("nan"), found.problem)
    ends = [estimate.interval(level) for level in LEVELS]
    inside = [low <= truth.value <= high for low, high in ends]
    pull = (estimate.value - truth.value) / estimate.stderr
    return Held(name, (inside[0], inside[1]), found.trusted, pull, "")


def report(held: list[Held]) -> str:
    """Return the table."""
    groups: dict[str, list[Held]] = defaultdict(list)
    for one in held:
        groups[one.what].append(one)
    rows = []
    for name, members in [*groups.items(), ("**all**", held)]:
        count = len(members)
        inside = [percent(100 * sum(m.inside[row] for m in members) / count) for row in range(2)]
        pulls = [m.pull for m in members if m.pull == m.pull]
        mean = f"{sum(pulls) / max(len(pulls), 1):+.2f}"
        trusted = percent(100 * sum(m.trusted for m in members) / count)
        rows.append((name, str(count), *inside, mean, trusted))
    head = ("truth", "fits", "inside 68.3 %", "inside 95 %", "mean pull", "trusted")
    return set_table(head, rows)


def main(argv: list[str] | None = None) -> int:
    """Play, fit, print."""
    parser = ArgumentParser(description="Truths of the demo's simulator inside the intervals of their fits")
    parser.add_argument("--seeds", type=int, default=50)
    parser.add_argument("--first", type=int, default=FIRST_SEED, help=f"first seed (default: {FIRST_SEED})")
    parser.add_argument("--nights", type=int, default=10, help="of the campaign's 30 (default: 10)")
    parser.add_argument("--processes", type=int, default=2)
    args = parser.parse_args(argv)
    began, held = time.monotonic(), []
    with ProcessPoolExecutor(args.processes) as pool:
        seeds = range(args.first, args.first + args.seeds)
        for done, future in enumerate(
            as_completed([pool.submit(partial(play, nights=args.nights), s) for s in seeds]), 1
        ):
            held += future.result()
            print(f"\r{done}/{args.seeds}", end="", file=sys.stderr, flush=True)
    print(file=sys.stderr)
    print(report(held))
    print(
        f"\n{args.seeds} seeds from {args.first}, {args.nights} nights; {time.monotonic() - began:.0f} s passed"
    )
    for problem in sorted({h.problem for h in held if h.problem}):
        print(f"not fitted: {problem}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
