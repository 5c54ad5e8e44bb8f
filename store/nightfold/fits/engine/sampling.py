"""Whether there are points where the curve changes, and enough of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.warning import FitWarning, figure, per_unit, with_unit

LEAST_ON_LINE = 3
LEAST_PER_PERIOD = 2.0
FEW_PER_PERIOD = 2.5
EVEN = 1e-3


@dataclass(frozen=True)
class Sampling:
    """Where points lie about what was found; lengths in the unit of x, None for what the model does not have.

    ``center`` and ``width`` are those of a line, ``time`` that of a decay that begins at x = 0; ``frequency`` that of
    an oscillation, ``told`` whether a start value or a fixed one says where to look for it.
    """

    x: Floats
    center: float | None = None
    width: float | None = None
    time: float | None = None
    frequency: float | None = None
    told: bool = False


def too_few(sampling: Sampling, unit: str) -> list[FitWarning]:
    """Return what is to be said of a line between the points, a decay over before the first, aliases."""
    found = (_on_line(sampling, unit), _decayed(sampling, unit), _aliased(sampling, unit))
    return [warning for warning in found if warning is not None]


def _on_line(sampling: Sampling, unit: str) -> FitWarning | None:
    center, width, x = sampling.center, sampling.width, np.unique(sampling.x)
    if center is None or width is None or not x[0] < center < x[-1]:
        return None
    low, high = center - width / 2, center + width / 2
    count = int(np.count_nonzero((x >= low) & (x <= high)))
    if count >= LEAST_ON_LINE:
        return None
    values = (
        "no value of x lies" if count == 0 else "1 value of x lies" if count == 1 else "2 values of x lie"
    )
    return FitWarning(
        "too-few-points",
        f"only {values} within the width of the line".replace("only no", "no")
        + f" ({low:.6g} to {figure(high, unit)}); take points every {with_unit(width / 5, unit, 2)} there",
    )


def _decayed(sampling: Sampling, unit: str) -> FitWarning | None:
    time, first = sampling.time, float(sampling.x.min())
    if time is None or not 0 < time < first:
        return None
    return FitWarning(
        "too-few-points",
        f"the first point, at {with_unit(first, unit)}, comes after {first / time:.2g} times the time found,"
        f" {with_unit(time, unit)}; begin the scan below {with_unit(time, unit, 2)}",
    )


def _aliased(sampling: Sampling, unit: str) -> FitWarning | None:
    """Return which other frequencies pass through evenly spaced points as well."""
    if sampling.frequency is None or not sampling.frequency > 0:
        return None
    step = lattice(sampling.x)
    if step is None or sampling.frequency * step * FEW_PER_PERIOD < 1:
        return None
    others = [abs(k / step + sign * sampling.frequency) for k in (1, 2) for sign in (-1, 1)]
    if sampling.frequency * step >= 0.5:
        others.append(abs(round(sampling.frequency * step) / step - sampling.frequency))
    others = sorted({float(f"{f:.9g}") for f in others} - {float(f"{sampling.frequency:.9g}")})[:3]
    under = sampling.frequency * step * LEAST_PER_PERIOD > 1 + 1e-9
    said = " and ".join([", ".join(per_unit(f, unit) for f in others[:-1]), per_unit(others[-1], unit)])
    return FitWarning(
        "too-few-points" if under else "aliases",
        f"{1 / (sampling.frequency * step):.2g} points a period, evenly spaced: frequencies of {said} pass through them"
        " as well; take points that are not evenly spaced",
        advisory=not under or sampling.told,
    )


def lattice(x: Floats) -> float | None:
    """Return the step of which all distances of points are whole multiples, None where there is none."""
    steps = np.diff(np.unique(x))
    if not len(steps):
        return None
    count = steps / steps.min()
    if np.abs(count - np.round(count)).max() > EVEN:
        return None
    return float(steps.sum() / np.round(count).sum())
