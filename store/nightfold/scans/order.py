"""The order in which the points of a scan were taken: whether a drift in time can hide in an axis."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import Any

from nightfold.scans.columns import encode

FEWEST_POINTS = 3
END = 4
"""A pass may begin in the first of so many parts of the values and end in the last: a shot at an end may be missing."""


def order_of(values: Sequence[Any]) -> str | None:
    """Return whether the values of an axis were taken in order: 'rising', 'falling' or 'mixed'.

    Parameters
    ----------
    values : (n,) sequence
        One a shot, in the order in which the shots were taken.

    Returns
    -------
    str or None
        None for text and truth, and for fewer than 3 distinct values.

    Notes
    -----
    'rising' means that the values begin in the lowest quarter of them and never go down, but from the highest quarter
    back to the lowest, to begin again. So the axis that a grid steps through slowly is in order if it never goes back,
    and the one it steps through quickly if it runs the same way in every row: in both, what drifts with time looks like
    a function of the axis. One that runs to and fro is mixed: there, drift shows as scatter between repeats.

    Examples
    --------
    >>> order_of([1.0, 2.0, 2.0, 3.0]), order_of([1.0, 2.0, 3.0, 1.0, 2.0, 3.0]), order_of([1.0, 2.0, 3.0, 2.0, 1.0])
    ('rising', 'rising', 'mixed')
    """
    column = encode(values)
    if not column.numeric or column.points < FEWEST_POINTS:
        return None
    codes = column.codes[column.codes >= 0].tolist()
    if _runs_up(codes, column.points):
        return "rising"
    last = column.points - 1
    return "falling" if _runs_up([last - code for code in codes], column.points) else "mixed"


def _runs_up(codes: Sequence[int], points: int) -> bool:
    """Whether ranks 0 to points - 1 are run through upwards, once or several times."""
    end = max(points // END, 1)
    steps_up = (
        later >= earlier or (earlier >= points - end and later < end) for earlier, later in pairwise(codes)
    )
    return codes[0] < end and all(steps_up)


def orders_of(columns: Mapping[str, Sequence[Any]]) -> dict[str, str]:
    """Return `order_of` each axis that has one."""
    orders = {name: order_of(values) for name, values in columns.items()}
    return {name: order for name, order in orders.items() if order is not None}
