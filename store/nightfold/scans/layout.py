"""Where each shot of a scan goes: into a cell of the grid of its axes, or into a list."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from nightfold.scans.columns import Codes, Column, encode, is_missing

SPARSE = 4
"""With two axes or more, a grid of more than this many times the shots stays a cloud of points."""

OWN_DIMENSIONS = ("repeat", "shot", "cloud")
"""Names of dimensions that are no parameters."""


@dataclass(frozen=True, slots=True)
class Layout:
    """Where each shot goes.

    Attributes
    ----------
    dims, shape : tuple
        Names and sizes of the dimensions that all variables share.
    cells : (n,) int array
        Flat index of each shot into an array of that shape; all different.
    points : dict of str to Column
        The axes that are dimensions, merged; empty where the one dimension is ``repeat`` or ``shot``.
    """

    dims: tuple[str, ...]
    shape: tuple[int, ...]
    cells: Codes
    points: Mapping[str, Column]

    def spread(self, values: NDArray[Any], hole: Any) -> NDArray[Any]:
        """Return values, one a shot, in their cells, and `hole` in all others."""
        flat = np.full(prod(self.shape), hole, dtype=values.dtype)
        flat[self.cells] = values
        return flat.reshape(self.shape)


def free_name(name: str, taken: Sequence[str] = OWN_DIMENSIONS) -> str:
    """Return a name with ``_`` behind it as often as it takes not to be one of those taken."""
    while name in taken:
        name += "_"
    return name


def lay_out(rows: pd.DataFrame, axes: Sequence[str], tolerance: float | Mapping[str, float] | None) -> Layout:
    """Return the places of the shots of a table, which must be in order of start."""
    count = len(rows)
    if not axes:
        return Layout(("repeat",), (count,), np.arange(count), {})
    limits = tolerance if isinstance(tolerance, Mapping) else dict.fromkeys(axes, tolerance)
    points = {axis: with_missing(encode(read_settings(rows, axis), limits.get(axis))) for axis in axes}
    sizes = tuple(column.points for column in points.values())
    if len(axes) >= 2 and prod(sizes) > SPARSE * count:
        return Layout(("shot",), (count,), np.arange(count), {})
    cells = (
        np.ravel_multi_index([column.codes for column in points.values()], sizes) if count else np.arange(0)
    )
    repeats = _count_repeats(cells)
    most = int(repeats.max()) + 1 if count else 1
    dims = tuple(free_name(axis) for axis in axes)
    if most == 1:
        return Layout(dims, sizes, cells, points)
    return Layout((*dims, "repeat"), (*sizes, most), cells * most + repeats, points)


def _count_repeats(cells: Codes) -> Codes:
    """Return how many shots before each one went into the same cell."""
    order = np.argsort(cells, kind="stable")
    ordered = cells[order]
    repeats = np.empty_like(cells)
    repeats[order] = np.arange(len(cells)) - np.searchsorted(ordered, ordered)
    return repeats


def read_settings(rows: pd.DataFrame, name: str) -> Sequence[Any] | NDArray[Any]:
    """Return a column of settings with missing text as ``""``, and as text where a truth is missing."""
    column = rows[name]
    if pd.api.types.is_bool_dtype(column.dtype) or not pd.api.types.is_numeric_dtype(column.dtype):
        items = [None if is_missing(value) else value for value in column]
        known = [value for value in items if value is not None]
        if None in items and any(isinstance(value, str | bool | np.bool_) for value in known):
            return ["" if value is None else str(value) for value in items]
        return items
    return column.to_numpy(np.float64, na_value=np.nan)


def with_missing(column: Column) -> Column:
    """Return a column whose missing values are a point of their own, NaN, behind the others."""
    missing = column.codes < 0
    if not missing.any():
        return column
    values = np.append(column.values.astype(np.float64), np.nan)
    return Column(np.where(missing, len(column.values), column.codes), values, column.tolerance)
