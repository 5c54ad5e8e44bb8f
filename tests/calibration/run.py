"""How often the fits are right: ``python tests/calibration/run.py [--quick] [--models …] [--n 16,30,60]``.

Simulates awkward scans (scans.py), fits them by the full recipe and prints, in percent: how often the truth is found,
how often intervals contain it, false outlier flags, and warnings given and missing. docs/calibration.md explains the
tables.
"""

from __future__ import annotations

import json
import os
import re
import sys
import time
from argparse import ArgumentParser, Namespace
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from pathlib import Path
from typing import Any

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
from tests.calibration.hopeless import hopeless_kinds
from tests.calibration.scans import HOPELESS, KINDS, REPORTED, ROWS, SIZES, make_batches
from tests.calibration.scoring import Score, score
from tests.calibration.shapes import SPECS
from tests.calibration.tables import Report

SETS, QUICK = 300, 20
BEGIN, END = "<!-- tables of run.py -->", "<!-- end of tables -->"
SHARES = {"clean": 1.0, "outliers": 2 / 3}
OTHER_SHARE = 0.2
"""Scans of a kind, per clean scan."""


@dataclass(frozen=True)
class Job:
    """Scans of one model, number of points and kind."""

    model: str
    n: int
    kind: str
    sets: int
    seed: int
    rows: int


def jobs(args: Namespace) -> Iterator[Job]:
    """Yield what is to be done, the largest first."""
    for kind in args.kinds:
        for model in args.models:
            if kind in HOPELESS and kind not in hopeless_kinds(SPECS[model]):
                continue
            for n in args.n:
                sets = max(1, round(args.sets * SHARES.get(kind, OTHER_SHARE)))
                yield Job(model, n, kind, sets, args.seed, args.rows)


def work(job: Job) -> tuple[Job, list[Score], float]:
    """Return the scores of a job and the processor seconds it took, simulation included."""
    began = time.process_time()
    batches = make_batches(job.model, job.n, job.kind, job.sets, job.seed, job.rows)
    return job, [score(batch) for batch in batches], time.process_time() - began


def run(todo: list[Job], processes: int, quiet: bool = False) -> tuple[list[Score], float]:
    """Return all scores in the order of the jobs, and processor seconds."""
    found: dict[Job, list[Score]] = {}
    spent, began = 0.0, time.monotonic()
    with ProcessPoolExecutor(processes) as pool:
        for done, future in enumerate(as_completed([pool.submit(work, job) for job in todo]), 1):
            job, scores, seconds = future.result()
            found[job] = scores
            spent += seconds
            if not quiet:
                passed = time.monotonic() - began
                line = f"{done}/{len(todo)} {job.model} n={job.n} {job.kind}: {passed:.0f} s"
                print(f"\r{line:<70}", end="", file=sys.stderr, flush=True)
    if not quiet:
        print(file=sys.stderr)
    return [score for job in todo for score in found[job]], spent


def as_json(scores: list[Score]) -> list[dict[str, Any]]:
    """Return counts a cell (model, n, kind, scatter, background), for other tables."""
    cells = sorted({(s.model, s.n, s.kind, s.noise, s.background) for s in scores})
    names = ("model", "n", "kind", "noise", "background")
    report = Report(scores)
    entries = []
    for cell in cells:
        wanted = dict(zip(names, cell, strict=True))
        tally = report.tally(**wanted)
        counts = {k: v.tolist() if hasattr(v, "tolist") else v for k, v in vars(tally).items()}
        entries.append({**wanted, **counts})
    return entries


def parse(argv: list[str] | None) -> Namespace:
    parser = ArgumentParser(description="Calibration of the fits on simulated scans")
    parser.add_argument("--models", default=",".join(SPECS), help="comma separated (default: all)")
    parser.add_argument("--kinds", default=",".join(KINDS), help="comma separated (default: all)")
    parser.add_argument(
        "--n", default=",".join(map(str, SIZES)), help="numbers of points (default: 16,30,60)"
    )
    parser.add_argument("--sets", type=int, default=None, help=f"clean scans a model and n (default: {SETS})")
    parser.add_argument("--seed", type=int, default=REPORTED, help=f"first seed (default: {REPORTED})")
    parser.add_argument("--rows", type=int, default=ROWS, help=f"scans that share x (default: {ROWS})")
    parser.add_argument("--quick", action="store_true", help=f"{QUICK} clean scans a model, n = 16 and 60")
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--docs", type=Path, help="put the tables into this page, between its marks")
    parser.add_argument("--json", type=Path, help="write counts a cell to this file")
    args = parser.parse_args(argv)
    args.models, args.kinds = args.models.split(","), args.kinds.split(",")
    args.n = (16, 60) if args.quick else tuple(int(n) for n in args.n.split(","))
    args.sets = args.sets or (QUICK if args.quick else SETS)
    for given, known in ((args.models, SPECS), (args.kinds, KINDS)):
        unknown = [name for name in given if name not in known]
        if unknown:
            parser.error(f"found {', '.join(unknown)}, wanted some of {', '.join(known)}")
    return args


def _into(page: Path, text: str) -> None:
    """Put text between the marks of a page, its tables without the padding of cells."""
    before, rest = page.read_text(encoding="utf-8").split(BEGIN)
    text = re.sub(r"-{4,}", "---", re.sub(r" +\|", " |", re.sub(r"\| +", "| ", text)))
    page.write_text(f"{before}{BEGIN}\n\n{text}\n\n{END}{rest.split(END)[1]}", encoding="utf-8")


def main(argv: list[str] | None = None) -> int:
    """Run, print, write."""
    args = parse(argv)
    began = time.monotonic()
    scores, spent = run(list(jobs(args)), args.processes)
    tables = Report(scores).everything()
    print(tables)
    scans = sum(len(s.success) for s in scores)
    fitting = sum(s.cpu for s in scores)
    print(
        f"\n{scans} scans, seeds from {args.seed}; {spent:.0f} s of processor time, {fitting:.0f} s of it"
        f" fitting ({1e3 * fitting / scans:.1f} ms a scan); {time.monotonic() - began:.0f} s passed"
    )
    crashes = [s.crash for s in scores if s.crash]
    for crash in crashes[:10]:
        print(f"refused: {crash}")
    if args.docs:
        _into(args.docs, f"{scans} scans, seeds from {args.seed}; all in percent.\n\n{tables}")
    if args.json:
        args.json.write_text(json.dumps(as_json(scores), indent=1), encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
