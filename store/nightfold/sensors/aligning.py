"""Readings brought to moments: the nearest one, or the mean over an interval. Pure functions of arrays."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


def nearest(at_us: Ints, values: Floats, moments_us: Ints, limit_us: int) -> Floats:
    """Return the reading nearest to each moment, NaN where none lies within the limit.

    Parameters
    ----------
    at_us : (n,) int array, microseconds
        Times of the readings, rising.
    values : (n,) float array
    moments_us : (m,) int array, microseconds
        In any order.
    limit_us : int
        How far a reading may be away, this included.

    Returns
    -------
    (m,) float array
        The reading as it stands, also where it is NaN; of two equally near, the earlier.
    """
    found = np.full(len(moments_us), np.nan)
    if not len(at_us):
        return found
    after = np.searchsorted(at_us, moments_us)
    before = np.maximum(after - 1, 0)
    after = np.minimum(after, len(at_us) - 1)
    back, ahead = np.abs(moments_us - at_us[before]), np.abs(at_us[after] - moments_us)
    place = np.where(back <= ahead, before, after)
    close = np.minimum(back, ahead) <= limit_us
    found[close] = values[place[close]]
    return found


def mean_over(at_us: Ints, values: Floats, starts_us: Ints, ends_us: Ints) -> Floats:
    """Return the mean of the readings in each interval, NaN where there is none.

    Parameters
    ----------
    at_us : (n,) int array, microseconds
        Times of the readings, rising.
    values : (n,) float array
        NaN is left out; an infinity makes its mean infinite.
    starts_us, ends_us : (m,) int arrays, microseconds
        Intervals in any order; the start is included, the end is not.

    Returns
    -------
    (m,) float array
    """
    kept = ~np.isnan(values)
    at_us, values = at_us[kept], values[kept]
    first, stop = np.searchsorted(at_us, starts_us), np.searchsorted(at_us, ends_us)
    means = np.full(len(starts_us), np.nan)
    some = stop > first
    if some.any():
        edges = np.column_stack([first[some], stop[some]]).reshape(-1)
        with np.errstate(invalid="ignore", over="ignore"):
            sums = np.add.reduceat(np.append(values, 0.0), edges)[::2]
            means[some] = sums / (stop[some] - first[some])
    return means


def typical_interval(counts: Ints, first_us: Ints, last_us: Ints) -> float:
    """Return the median time between neighbouring readings, as told by the hours they were packed in.

    Parameters
    ----------
    counts, first_us, last_us : (hours,) int arrays
        How many readings each hour has, and when its first and last were; hours rising.

    Returns
    -------
    float
        Microseconds: each hour counts with its mean interval as often as it has intervals, each gap between two
        hours once; NaN for a single reading.
    """
    inside = counts > 1
    intervals = np.concatenate(
        [
            (last_us - first_us)[inside] / (counts[inside] - 1),
            (first_us[1:] - last_us[:-1]).astype(np.float64),
        ]
    )
    weights = np.concatenate([counts[inside] - 1, np.ones(max(0, len(counts) - 1), np.int64)])
    if not len(intervals):
        return float("nan")
    order = np.argsort(intervals)
    reached = np.cumsum(weights[order])
    return float(intervals[order][np.searchsorted(reached, reached[-1] / 2)])


def ends_of_shots(
    starts_us: Ints, durations_us: Floats, machine_us: Ints, around: int = 20
) -> tuple[Ints, NDArray[np.bool_]]:
    """Return when each shot ended, and whether that is known.

    Parameters
    ----------
    starts_us : (m,) int array, microseconds
        Starts of the shots.
    durations_us : (m,) float array
        How long they took, NaN where their sequence does not say it.
    machine_us : (n,) int array
        Starts of all shots of the machine from `around` before the first to `around` after the last, rising.
    around : int
        A shot of unknown duration ends with the start of the next one, but takes no longer than the median of the
        intervals from `around` shots before it to `around` after it.

    Returns
    -------
    ends_us : (m,) int array
    known : (m,) bool array
        False for the only shot of its machine, whose sequence says no duration.
    """
    import pandas as pd

    stated = np.isfinite(durations_us)
    moments = np.unique(machine_us)
    gaps = np.diff(moments).astype(np.float64)
    known = stated | (len(gaps) > 0)
    if not len(gaps):
        return starts_us + np.where(stated, durations_us, 0).astype(np.int64), known
    place = np.searchsorted(moments, starts_us)
    rolling = pd.Series(np.append(gaps, np.nan)).rolling(2 * around, center=True, min_periods=1)
    usual = rolling.median().to_numpy()[place]
    following = np.append(gaps, np.inf)[place]
    took = np.where(stated, durations_us, np.minimum(following, usual))
    return starts_us + took.astype(np.int64), known
