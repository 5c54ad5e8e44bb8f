"""Readings relative to what reference shots say at the same moment.

Pure functions of arrays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FEWEST = 5
"""Reference shots from which their scatter can be told."""

_TO_SIGMA = 1.4826  # of a median of absolute values, for a normal distribution

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Level:
    """What reference shots say at some moments.

    Attributes
    ----------
    value, stderr : (n,) float array
        In the unit of the observable; NaN where no reference shot is near enough, `stderr` also where it is not known.
    distance_s : (n,) float array
        Seconds to the nearest reference shot; infinite where there is none.
    """

    value: Floats
    stderr: Floats
    distance_s: Floats


def level_at(at: Floats, times: Floats, values: Floats, stderr: Floats, within_s: float) -> Level:
    """Return what reference shots say at the moments asked for.

    Parameters
    ----------
    at : (n,) float array, s
        The moments.
    times : (m,) float array, s
        When the reference shots were taken, rising.
    values, stderr : (m,) float array
        What they read; a standard uncertainty of NaN is not known.
    within_s : float
        Reference shots farther from a moment than this do not count for it.

    Notes
    -----
    Between the last reference shot before and the first one after, the value is interpolated linearly in time:
    r = w1 r1 + w2 r2, and s^2 = w1^2 s1^2 + w2^2 s2^2. Where only one of the two is near enough, it stands alone.
    s1 and s2 are the larger of the stated uncertainty and of `scatter_of` the reference shots.

    References
    ----------
    JCGM 100:2008 (GUM), equation (10).
    """
    if not len(times):
        return Level(*(np.full(len(at), fill) for fill in (np.nan, np.nan, np.inf)))
    known = known_stderr(times, values, stderr, within_s)
    before, after, share, distance = _shares(at, times, within_s)
    value = (1 - share) * values[before] + share * values[after]
    squares = _part(1 - share, known[before]) ** 2 + _part(share, known[after]) ** 2
    far = distance > within_s
    return Level(np.where(far, np.nan, value), np.where(far, np.nan, np.sqrt(squares)), distance)


def known_stderr(times: Floats, values: Floats, stderr: Floats, within_s: float) -> Floats:
    """Return the standard uncertainty of each reference shot: the larger of stated and seen, (m,)."""
    return np.asarray(np.fmax(stderr, scatter_of(times, values, within_s)))


def shared_errors(
    at: Floats, times: Floats, known: Floats, within_s: float, ratio: Floats, level: Floats
) -> Floats:
    """Return the change of each ratio with each reference shot by one standard uncertainty of it, (n, m).

    Parameters
    ----------
    at, times, within_s
        As in `level_at`.
    known : (m,) float array
        As by `known_stderr`.
    ratio, level : (n,) float array
        Readings divided by the level, and the level.

    Notes
    -----
    To first order, as `ratio_of`: -(y / r^2) w s. The products of two rows are the covariances of two ratios that come
    from the reference shots (JCGM 102:2011, 6.2).
    """
    errors = np.zeros((len(at), len(times)))
    if not len(times):
        return errors
    before, after, share, _ = _shares(at, times, within_s)
    rows = np.arange(len(at))
    errors[rows, before] = _part(1 - share, known[before])
    errors[rows, after] += _part(share, known[after])
    return -(ratio / level)[:, None] * errors


def _shares(
    at: Floats, times: Floats, within_s: float
) -> tuple[NDArray[np.intp], NDArray[np.intp], Floats, Floats]:
    """Return which reference shots count for each moment, the share of the second, and how far the nearer one is."""
    before, after, since, until = _neighbours(at, times)
    with np.errstate(invalid="ignore"):
        share = np.where(until <= within_s, since / (since + until), 0.0)
    return before, after, np.where(since <= within_s, share, 1.0), np.minimum(since, until)


def nearest(at: Floats, times: Floats) -> Floats:
    """Return how far each moment is from the nearest of some times, which rise; infinite where there is none."""
    if not len(times):
        return np.full(len(at), np.inf)
    _, _, since, until = _neighbours(at, times)
    return np.minimum(since, until)


def _neighbours(at: Floats, times: Floats) -> tuple[NDArray[np.intp], NDArray[np.intp], Floats, Floats]:
    """Return the places of the last time before each moment (or at it) and the first after, and how far they are."""
    after = np.searchsorted(times, at, side="right")
    first, last = np.maximum(after - 1, 0), np.minimum(after, len(times) - 1)
    since = np.where(after > 0, at - times[first], np.inf)
    until = np.where(after < len(times), times[last] - at, np.inf)
    return first, last, since, until


def _part(share: Floats, stderr: Floats) -> Floats:
    """Return a part of the error; what has no share in the value has none in its uncertainty."""
    return np.where(share > 0, share * stderr, 0.0)


def scatter_of(times: Floats, values: Floats, within_s: float) -> float:
    """Return the standard deviation of single reference shots about their slow drift; NaN for fewer than 5.

    Parameters
    ----------
    times : (m,) float array, s
        Rising.
    values : (m,) float array
    within_s : float
        Neighbours farther apart than this are not compared.

    Notes
    -----
    Each value is compared with the straight line through its two neighbours, e = y2 - w1 y1 - w3 y3, which takes
    out any drift that is linear over three shots; e / sqrt(1 + w1^2 + w3^2) has the variance of a single shot.
    1.4826 times the median of its absolute values is the standard deviation, whatever a few failed shots do.
    From 12 shots it is known to some 40 %, from 50 to 20 %.

    References
    ----------
    T. Gasser, L. Sroka, C. Jennen-Steinmetz, Biometrika 73, 625 (1986), doi:10.1093/biomet/73.3.625.
    P. J. Rousseeuw, C. Croux, J. Am. Stat. Assoc. 88, 1273 (1993), doi:10.1080/01621459.1993.10476408.
    """
    gaps = np.diff(times)
    usable = (gaps[:-1] <= within_s) & (gaps[1:] <= within_s) & (gaps[:-1] + gaps[1:] > 0)
    if usable.sum() < FEWEST - 2:
        return float("nan")
    first = gaps[1:][usable] / (gaps[:-1] + gaps[1:])[usable]
    line = first * values[:-2][usable] + (1 - first) * values[2:][usable]
    residuals = (values[1:-1][usable] - line) / np.sqrt(1 + first**2 + (1 - first) ** 2)
    return float(_TO_SIGMA * np.median(np.abs(residuals)))


def ratio_of(values: Floats, stderr: Floats, level: Level) -> tuple[Floats, Floats]:
    """Return readings divided by the level of the reference shots, and their standard uncertainties.

    Notes
    -----
    Var(y/r) = (s_y / r)^2 + (y s_r / r^2)^2, to first order in s_r / r. The second part is much the same for all shots
    between the same two reference shots: their errors are correlated.

    References
    ----------
    JCGM 100:2008 (GUM), equation (10).
    """
    ratio = values / level.value
    return ratio, np.hypot(stderr / level.value, ratio * level.stderr / level.value)
