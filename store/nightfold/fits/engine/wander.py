"""Drifts while the scan was taken.

Residuals are compared with slow cosines in the order of taking. Where the points were taken in the order of x, such a
drift cannot be told from the curve itself; where they were shuffled it counts as scatter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.misfit import Plane, cosines, seek
from nightfold.fits.engine.warning import FitWarning, chance

LEVEL = 0.006
SLOW = 3
LEAST_KNOWN = 0.8
SAME_ORDER = 0.8
"""Rank correlation of x and time from which on points count as taken in the order of x."""
INFLATED = 2.0
"""A drift that is allowed for and multiplies a standard uncertainty by this cannot be told from the curve."""


@dataclass(frozen=True)
class Wander:
    """How residuals go with time: ``p`` of their being shuffled; whether a drift is ``confounded`` with the curve."""

    p: float
    confounded: bool


def wander(plane: Plane, started: Floats) -> Wander | None:
    """Return how residuals go with the time they were taken at, nan where unknown; None if it cannot be told."""
    known = np.isfinite(started)
    times, rank = np.unique(started[known], return_inverse=True)
    if known.mean() < LEAST_KNOWN or len(times) < plane.spare // 2 or len(times) < 4:
        return None
    slow = np.zeros((len(started), SLOW))
    slow[known] = cosines(rank, SLOW)
    slow *= plane.roots[:, None]
    pattern = seek(plane, slow)
    if pattern is None:
        return None
    if pattern.p > LEVEL:
        return Wander(pattern.p, False)
    place = np.unique(plane.u[known], return_inverse=True)[1].astype(np.float64)
    ordered = len(times) > 1 and np.ptp(place) > 0 and abs(np.corrcoef(place, rank)[0, 1]) > SAME_ORDER
    return Wander(pattern.p, bool(ordered or _inflation(plane, slow) > INFLATED))


def _inflation(plane: Plane, directions: Floats) -> float:
    """Return by how much the least known reported number gets worse when the curve may follow the directions too."""
    whole = np.concatenate([plane.slopes, directions], axis=1)
    size = np.linalg.norm(whole, axis=0)
    size = np.where(size > 0, size, 1.0)
    count = plane.slopes.shape[1]
    change = plane.change / size[:count]
    alone = np.linalg.norm(change @ np.linalg.pinv(plane.slopes / size[:count], rcond=1e-6), axis=1)
    both = np.linalg.norm(change @ np.linalg.pinv(whole / size, rcond=1e-6)[:count], axis=1)
    known = alone > 0
    return float((both[known] / alone[known]).max(initial=1.0))


def drift_within_scan(found: Wander | None) -> FitWarning | None:
    """Return what is to be said of it."""
    if found is None or found.p > LEVEL:
        return None
    how = f"the residuals wander in the order of taking (chance does so in {chance(found.p)} of scans)"
    if found.confounded:
        return FitWarning(
            "drift-within-scan",
            f"{how}, which a drift during the scan would do, and the points were taken in such an order that it cannot"
            " be told from the curve; shuffle the order of the points and take the scan again",
        )
    return FitWarning(
        "drift-within-scan",
        f"{how}: conditions drifted during the scan; as the order was shuffled this counts as scatter, and the"
        " uncertainties hold; reference shots in between would make them smaller",
        advisory=True,
    )
