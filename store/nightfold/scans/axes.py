"""The axes of a scan: which parameters they are, and which move along with one.

Pure functions of columns, one value a shot, in the order in which the shots were taken.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import isfinite
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nightfold.scans.columns import JITTER, Column, Floats, encode, merge_jitter

__all__ = ["Axis", "choose_axes", "co_moving", "describe_axis", "encode", "merge_jitter"]

MANY_POINTS = 5
"""From here on a monotone relation between two parameters is no accident (2/n! for random ones)."""

Value = float | str | bool


@dataclass(frozen=True, slots=True)
class Axis:
    """One axis of a scan.

    Attributes
    ----------
    parameter : str
        Name of the swept parameter.
    unit : str
        Its unit; empty for text, truth and plain numbers.
    points : int
        Number of distinct values.
    low, high : float or None
        Smallest and largest value; None for text and truth.
    values : tuple of float, str or bool
        The distinct values, sorted, after merging of jitter.
    """

    parameter: str
    unit: str
    points: int
    low: float | None
    high: float | None
    values: tuple[Value, ...]


def describe_axis(parameter: str, unit: str, values: Sequence[Any], tolerance: float | None = None) -> Axis:
    """Return the axis that the values of one parameter make, one value a shot, in any order."""
    column = encode(values, tolerance)
    distinct: tuple[Value, ...] = tuple(column.values.tolist())
    if not column.numeric or not distinct:
        return Axis(parameter, unit, len(distinct), None, None, distinct)
    return Axis(parameter, unit, len(distinct), float(distinct[0]), float(distinct[-1]), distinct)


def co_moving(leader: Sequence[Any] | NDArray[Any], follower: Sequence[Any] | NDArray[Any]) -> bool:
    """Return whether `follower` is an exact function of `leader`, beyond what chance would do.

    Parameters
    ----------
    leader, follower : (n,) sequences
        One value a shot, numbers, text or truth, in the order in which the shots were taken.

    Notes
    -----
    Where every leader value is met with one follower value only, that may still be accident: in a cloud of
    random points no value occurs twice. So one of these must hold besides:

    - numbers, strictly monotone over at least 5 distinct values (2/n! of random clouds are), or on a
      straight line within 1e-6 of the span over at least 3;
    - confirmed by revisits: at least 3 leader values (both, where there are two) were left and met again,
      with the follower found back each time, and not always the same one. Repeats in a row do not count:
      an edit between two points survives them. A cloud taken twice passes this too; so where numbers map
      one to one over 5 points or more, the follower must turn markedly less often than random numbers
      would (2(n-2)/3 turning points, variance (16n-29)/90): by 3 standard deviations.

    References
    ----------
    Turning points: M. G. Kendall, A. Stuart, J. K. Ord, The Advanced Theory of Statistics, vol. 3, 4th ed.
    (1983), section 45.18.
    """
    return follows(encode(leader), encode(follower))


def follows(leader: Column, follower: Column) -> bool:
    """Return whether one encoded column is an exact function of another; see `co_moving`."""
    pairs = set(zip(leader.codes.tolist(), follower.codes.tolist(), strict=True))
    pairs.discard((-1, -1))
    image = dict(pairs)
    if len(image) != len(pairs) or -1 in image or -1 in image.values():
        return False
    met = len(set(image.values()))
    if met < 2:
        return False
    one_to_one = leader.numeric and follower.numeric and met == len(image)
    turns = 0
    if one_to_one:
        order = sorted(image)
        turns = count_turns([image[code] for code in order])
        enough = len(image) >= MANY_POINTS or (len(image) >= 3 and _on_a_line(leader, follower, image))
        if turns == 0 and enough:
            return True
    if not _confirmed(leader.codes.tolist(), image):
        return False
    return not one_to_one or len(image) < MANY_POINTS or _turns_rarely(turns, len(image))


def count_turns(values: Sequence[float]) -> int:
    """Return the number of turning points of a series without ties."""
    rises = [later > earlier for earlier, later in pairwise(values)]
    return sum(one != other for one, other in pairwise(rises))


def _turns_rarely(turns: int, points: int) -> bool:
    expected, variance = 2 * (points - 2) / 3, (16 * points - 29) / 90
    return turns <= expected - 3 * float(np.sqrt(variance))


def _on_a_line(leader: Column, follower: Column, image: Mapping[int, int]) -> bool:
    x = leader.values[list(image)]
    y = follower.values[list(image.values())]
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        return False
    low, high = int(np.argmin(x)), int(np.argmax(x))
    line = y[low] + (y[high] - y[low]) * ((x - x[low]) / (x[high] - x[low]))
    return bool(np.all(np.abs(y - line) <= JITTER * np.ptp(y)))


def _confirmed(codes: Sequence[int], image: Mapping[int, int]) -> bool:
    seen: set[int] = set()
    again: set[int] = set()
    events = 0
    for earlier, later in pairwise([-1, *codes]):
        if later == earlier or later < 0:
            continue
        if later in seen:
            again.add(later)
            events += 1
        seen.add(later)
    enough = len(again) >= 3 or (len(again) == len(image) == 2 and events >= 4)
    return enough and len({image[code] for code in again}) >= 2


def choose_axes(
    columns: Mapping[str, Sequence[Any]], swept: Sequence[str]
) -> tuple[tuple[str, ...], dict[str, str]]:
    """Return the axes of a scan, and for each parameter that moves along with one, which axis that is.

    Parameters
    ----------
    columns : mapping of name to (n,) sequence
        Values of every parameter that varies within the scan and of every swept one, in the order of taking.
    swept : sequence of str
        Parameters declared or found to be swept, in the order wanted. Empty: every varying parameter
        may become an axis, those with most distinct values first (then by name).

    Returns
    -------
    axes : tuple of str
        Swept parameters that are no functions of the ones before them. Where `swept` is empty also no
        parameter that is a linear function of several others (those with most distinct values go first).
    followers : dict of str to str
        Co-moving parameter -> axis.

    Notes
    -----
    A swept parameter that has not moved yet stays an axis, of one point. A parameter that varies without
    being swept and without following an axis is in neither part of the result.
    """
    encoded = {name: encode(values) for name, values in columns.items()}
    varying = [name for name, column in encoded.items() if column.points > 1]
    ranked = sorted(varying, key=lambda name: (-encoded[name].points, not encoded[name].numeric, name))
    axes: list[str] = []
    followers: dict[str, str] = {}
    for name in dict.fromkeys(swept) if swept else ranked:
        leader = _leader(name, axes, encoded)
        if leader is None:
            axes.append(name)
        else:
            followers[name] = leader
    if not swept:
        axes = _independent(axes, encoded)
    for name in ranked:
        leader = _leader(name, axes, encoded)
        if name not in axes and name not in followers and leader is not None:
            followers[name] = leader
    return tuple(axes), {name: leader for name, leader in followers.items() if leader in axes}


def _leader(name: str, axes: Sequence[str], encoded: Mapping[str, Column]) -> str | None:
    column = encoded.get(name)
    if column is None:
        return None
    return next((axis for axis in axes if axis in encoded and follows(encoded[axis], column)), None)


def _independent(axes: Sequence[str], encoded: Mapping[str, Column]) -> list[str]:
    """Return the axes without those that are a linear function of two or more others."""
    kept = list(axes)
    for name in axes:
        others = [other for other in kept if other != name and encoded[other].numeric]
        if (
            len(others) >= 2
            and encoded[name].numeric
            and _spanned(encoded[name], [encoded[o] for o in others])
        ):
            kept.remove(name)
    return kept


def _spanned(column: Column, others: Sequence[Column]) -> bool:
    if any((each.codes < 0).any() or not np.isfinite(each.values).all() for each in (column, *others)):
        return False
    rows = np.unique(np.stack([each.codes for each in (*others, column)], axis=1), axis=0)
    if len(rows) <= len(others) + 2:
        return False
    scaled = [_unit_span(each.values)[rows[:, k]] for k, each in enumerate(others)]
    target = _unit_span(column.values)[rows[:, -1]]
    design = np.stack([*scaled, np.ones(len(rows))], axis=1)
    solution = np.linalg.lstsq(design, target, rcond=None)[0]
    return bool(np.abs(design @ solution - target).max() <= JITTER)


def _unit_span(values: NDArray[Any]) -> Floats:
    low, high = float(values[0]), float(values[-1])
    span = high - low
    scaled: Floats = (values - low) / span if span > 0 and isfinite(span) else values - low
    return scaled
