"""A one-line trend of an observable along an axis, for lists of scans."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nightfold.scans.columns import encode

HEIGHTS = "▁▂▃▄▅▆▇█"


def trend(x: Sequence[Any] | NDArray[Any], y: Sequence[float] | NDArray[Any], width: int = 24) -> str:
    """Return the mean of `y` at each distinct `x`, lowest block to highest, at most `width` characters.

    Parameters
    ----------
    x : (n,) sequence
        Numbers, text or truth; shots without a value are left out.
    y : (n,) sequence of float
        NaN where a shot has no number; a point with none at all is a blank.
    width : int
        More points than this are averaged in neighbouring groups of nearly equal size.

    Examples
    --------
    >>> trend([3, 1, 2, 2], [9.0, 1.0, 5.0, float("nan")])
    '▁▅█'
    """
    column = encode(x)
    numbers = np.asarray(y, dtype=np.float64)
    use = (column.codes >= 0) & np.isfinite(numbers)
    bins = min(column.points, max(width, 1))
    if not bins:
        return ""
    place = column.codes[use] * bins // column.points
    counts = np.bincount(place, minlength=bins)
    shares = numbers[use] / counts[place]  # a sum first could exceed the largest float
    means = np.where(counts > 0, np.bincount(place, weights=shares, minlength=bins), np.nan)
    return "".join(_block(mean, means[counts > 0]) for mean in means)


def _block(mean: float, known: NDArray[np.float64]) -> str:
    if np.isnan(mean):
        return " "
    low, high = float(known.min()), float(known.max())
    if not high > low:
        return HEIGHTS[3]
    return HEIGHTS[round((mean / 2 - low / 2) / (high / 2 - low / 2) * (len(HEIGHTS) - 1))]
