"""One parameter over the shots of a scan: its distinct values, float jitter merged.

Pure functions of arrays.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

JITTER = 1e-6
"""Default merge tolerance, as a share of the span of the values."""

Floats = NDArray[np.float64]
Codes = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Column:
    """The values of one parameter over the shots of a scan, as codes into its sorted distinct values.

    Attributes
    ----------
    codes : (n,) int array
        Index of each shot's value in `values`; -1 where the shot has none.
    values : (points,) array
        Sorted distinct values: float64, bool, or object holding str.
    tolerance : float
        Numbers that lay closer together than this were taken for the same one; 0 for text and truth.
    """

    codes: Codes
    values: NDArray[Any]
    tolerance: float = 0.0

    @property
    def numeric(self) -> bool:
        """Whether the values are numbers."""
        return self.values.dtype == np.float64

    @property
    def points(self) -> int:
        """Number of distinct values."""
        return len(self.values)


def merge_jitter(values: Floats, tolerance: float | None = None) -> tuple[Floats, Codes]:
    """Return the distinct values, and which of them each value belongs to, after merging of float jitter.

    Parameters
    ----------
    values : (n,) float array
        Any order; NaN allowed.
    tolerance : float, optional
        Neighbours at most this far apart are the same point; default 1e-6 of the span of the finite values.

    Returns
    -------
    centres : (points,) float array
        Sorted; each is a value that occurred, the (lower) median of those merged into it.
    index : (n,) int array
        Index into `centres`; -1 for NaN.

    Notes
    -----
    Merging is by single linkage of the sorted values, so neither the order of the values nor where a
    cluster begins matters. Equal values are always merged, unequal ones never when the tolerance is 0.

    Examples
    --------
    >>> merge_jitter(np.array([0.3, 0.1, 0.1 + 0.2]))[1].tolist()
    [1, 0, 1]
    """
    values = np.asarray(values, dtype=np.float64)
    index = np.full(len(values), -1, dtype=np.intp)
    known = np.flatnonzero(~np.isnan(values))
    if not len(known):
        return np.empty(0), index
    order = known[np.argsort(values[known], kind="stable")]
    ordered = values[order]
    limit = default_tolerance(ordered) if tolerance is None else tolerance
    with np.errstate(invalid="ignore", over="ignore"):
        first = np.concatenate(([True], (ordered[1:] - ordered[:-1] > limit)))
    index[order] = np.cumsum(first) - 1
    starts = np.flatnonzero(first)
    stops = np.append(starts[1:], len(ordered))
    return ordered[(starts + stops - 1) // 2], index


def default_tolerance(values: Floats) -> float:
    """Return 1e-6 of the span of the finite values, 0 where there are none."""
    finite = values[np.isfinite(values)]
    if not len(finite):
        return 0.0
    low, high = float(finite.min()), float(finite.max())
    span = JITTER * (high - low)
    return span if math.isfinite(span) else JITTER * high - JITTER * low


def encode(values: Sequence[Any] | NDArray[Any], tolerance: float | None = None) -> Column:
    """Return a column as codes into its sorted distinct values.

    Parameters
    ----------
    values : (n,) sequence of numbers, str, bool; None or NaN where a shot has no value
        Values of mixed kinds count as text.
    tolerance : float, optional
        Merge tolerance of numbers, see `merge_jitter`.
    """
    if isinstance(values, np.ndarray) and values.dtype.kind in "fiu":
        return _encode_numbers(values.astype(np.float64), tolerance)
    items = [None if is_missing(value) else value for value in values]
    kinds = {bool if isinstance(v, bool | np.bool_) else type(v) for v in items if v is not None}
    if kinds and all(kind is not bool and issubclass(kind, int | float | np.number) for kind in kinds):
        return _encode_numbers(np.array([np.nan if v is None else v for v in items], np.float64), tolerance)
    truth = kinds == {bool}
    texts = [v if v is None or truth else str(v) for v in items]
    distinct = sorted({v for v in texts if v is not None})
    place = {v: k for k, v in enumerate(distinct)}
    codes = np.array([-1 if v is None else place[v] for v in texts], dtype=np.intp)
    return Column(codes, np.array(distinct, dtype=np.bool_ if truth else object))


def _encode_numbers(values: Floats, tolerance: float | None) -> Column:
    centres, codes = merge_jitter(values, tolerance)
    return Column(codes, centres, default_tolerance(values) if tolerance is None else tolerance)


def is_missing(value: Any) -> bool:
    """Return whether a value stands for no value: None, NaN, NaT or pandas' NA."""
    if value is None or isinstance(value, str):
        return value is None
    try:
        return bool(value != value)
    except TypeError:  # pandas.NA has no truth value
        return True
