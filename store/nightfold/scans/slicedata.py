"""The fits of the slices of a scan as a labelled array: estimates over the axes not fitted along."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from nightfold.scans.layout import Layout, free_name, lay_out

if TYPE_CHECKING:
    from nightfold.fits.estimate import EstimateColumn
    from nightfold.fits.many import FitTable

_LEVELS = (("68", 0.6827), ("95", 0.95))


def estimates_dataset(fits: FitTable) -> xr.Dataset:
    """Return the estimates of a table of fits on the grid of its slices.

    Notes
    -----
    As `FitTable.to_dataset`; the grid is laid out as that of `Scan.dataset`.
    """
    layout, coords, dims = _place(fits)
    variables: dict[str, xr.Variable] = {}
    for name, column in (fits.estimates | fits.derived).items():
        variables |= _estimate(layout, dims, free_name(name, tuple(coords)), column)
    own: dict[str, tuple[NDArray[Any], Any, str]] = {
        "trusted": (np.asarray(fits.trusted), False, "whether no warning but advisory ones was given"),
        "warnings": (_codes(fits), "", "codes of the warnings"),
        "points": (np.asarray(fits.n, dtype=np.int64), 0, "number of points used"),
        "residual_stderr": (
            np.asarray(fits.residual_stderr, dtype=np.float64),
            np.nan,
            "scatter of a point about the curve",
        ),
    }
    for name, (values, hole, text) in own.items():
        variables[free_name(name, tuple(coords))] = xr.Variable(
            dims, layout.spread(values, hole), {"long_name": text}
        )
    if unit := fits.outcome.request.unit_y:
        variables[free_name("residual_stderr", tuple(coords))].attrs["units"] = unit
    about = {name: value for name, value in fits.about.items() if value is not None}
    attrs = {"Conventions": "CF-1.11", "model": fits.model, "background": fits.background, **about}
    return xr.Dataset(variables, coords, attrs=attrs)


def _place(fits: FitTable) -> tuple[Layout, dict[str, xr.Variable], tuple[str, ...]]:
    """Return where each fit goes, the coordinates, and the names of the dimensions."""
    if not fits.slices:
        return Layout(("fit",), (len(fits),), np.arange(len(fits)), {}), {}, ("fit",)
    rows = pd.DataFrame([dict(where) for where in fits.slices])
    axes = list(rows.columns)
    layout = lay_out(rows, axes, 0.0)
    names = {axis: free_name(axis, ("slice",)) for axis in axes}
    attrs = {
        axis: {"long_name": axis}
        | ({"units": fits.slice_units[axis]} if fits.slice_units.get(axis) else {})
        | ({"original_name": axis} if names[axis] != axis else {})
        for axis in axes
    }
    if not layout.points:  # too few slices to fill a grid
        coords = {
            names[axis]: xr.Variable(("slice",), _plain(rows[axis].to_numpy()), attrs[axis]) for axis in axes
        }
        return layout, coords, ("slice",)
    coords = {
        names[axis]: xr.Variable((names[axis],), _plain(column.values), attrs[axis])
        for axis, column in layout.points.items()
    }
    return layout, coords, tuple(names[axis] for axis in axes)


def _estimate(
    layout: Layout, dims: tuple[str, ...], name: str, column: EstimateColumn
) -> dict[str, xr.Variable]:
    """Return one estimate: value, stderr, and the ends of two intervals."""
    units = {"units": column.unit} if column.unit else {}
    parts = {"": (column.value, name), "_stderr": (column.stderr, f"standard uncertainty of {name}")}
    for level, probability in _LEVELS:
        low, high = column.interval(probability)
        parts[f"_low{level}"] = (low, f"lower end of the {100 * probability:g} % interval of {name}")
        parts[f"_high{level}"] = (high, f"upper end of the {100 * probability:g} % interval of {name}")
    made = {
        name + suffix: xr.Variable(
            dims, layout.spread(np.asarray(values, dtype=np.float64), np.nan), {"long_name": text, **units}
        )
        for suffix, (values, text) in parts.items()
    }
    made[name].attrs["ancillary_variables"] = " ".join(name + suffix for suffix in parts if suffix)
    return made


def _codes(fits: FitTable) -> NDArray[Any]:
    return np.array([" ".join(warning.code for warning in found) for found in fits.warnings], dtype=np.str_)


def _plain(values: NDArray[Any]) -> NDArray[Any]:
    return values.astype(np.str_) if values.dtype == object else values
