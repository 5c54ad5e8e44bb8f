"""What a fit makes of a number that is known to be true."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from nightfold_cli.estimates import LEVEL_95
from nightfold_cli.progress import Progress
from nightfold_cli.slices import Slice, parts_of

if TYPE_CHECKING:
    from nightfold.fits.estimate import Estimate
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.scans.scan import Scan
    from nightfold.simulator import Truth
    from nightfold.store import Store


MACHINE = "heron"


@dataclass(frozen=True, slots=True)
class Found:
    """A truth, and what a fit made of it; `estimate` is None where nothing could be fitted."""

    truth: Truth
    scan: str | None
    estimate: Estimate | None
    trusted: bool
    problem: str = ""

    @property
    def interval95(self) -> tuple[float, float] | None:
        """Return the 95 % interval."""
        return self.estimate.interval(LEVEL_95) if self.estimate else None

    @property
    def held(self) -> bool | None:
        """Return whether the 95 % interval holds the truth; None without an interval."""
        ends = self.interval95
        return None if ends is None else ends[0] <= self.truth.value <= ends[1]

    @property
    def verdict(self) -> str:
        """Return whether the interval holds the truth, and whether the fit says not to trust it."""
        if self.held is None:
            return self.problem or "-"
        return ("yes" if self.held else "NO") + ("" if self.trusted else ", not trusted")


def fit_truths(store: Store, truths: Sequence[Truth]) -> list[Found]:
    """Fit the scan behind each truth."""
    scans = store.scans()
    found = []
    with Progress("fitting scans", len(truths), sys.stderr) as progress:
        for count, truth in enumerate(truths):
            progress(count)
            found.append(find_truth(store, truth, _scan_of(scans, truth)))
    return found


def find_truth(store: Store, truth: Truth, scan: Scan | None = None, *, keep: bool = True) -> Found:
    """Fit one scan, and pick the estimate that the truth speaks of; without a scan its own."""
    from nightfold.errors import NightfoldError

    scan = scan or _scan_of(store.scans(), truth)
    if scan is None:
        return Found(truth, None, None, False, "no such scan was found")
    try:
        outcome = store.fit(
            scan,
            truth.model,
            observable=truth.observable,
            along=truth.along,
            background=truth.background,
            relative_to=truth.relative_to,
            keep=keep,
        )
    except NightfoldError as error:
        return Found(truth, scan.key, None, False, str(error))
    result = _slice(outcome, truth)
    return Found(truth, scan.key, result.estimates[truth.parameter], result.trusted)


def _scan_of(scans: Sequence[Scan], truth: Truth) -> Scan | None:
    """Return the scan a truth speaks of: by its key, or by sequence and time where it has no label."""
    for scan in scans:
        if scan.key == truth.scan and scan.machine == MACHINE:
            return scan
    within = [
        scan
        for scan in scans
        if scan.sequence == truth.sequence
        and scan.first <= truth.last
        and scan.last >= truth.first
        and {axis.parameter for axis in scan.axes} >= set(truth.swept[:1])
    ]
    return max(within, key=lambda scan: scan.shots, default=None)


def _slice(outcome: FitResult | FitTable, truth: Truth) -> FitResult:
    """Return the fit of the slice a truth speaks of: the one nearest to where it is stated."""

    def distance(part: Slice) -> float:
        return sum(abs(float(part.where[name]) - value) for name, value in truth.where.items())

    return min(parts_of(outcome), key=distance).result
