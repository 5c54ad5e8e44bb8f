"""A scan's table of shots, laid out as a labelled array: on the grid of its axes, or as a cloud of points."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from nightfold.card import split_cloud
from nightfold.scans.columns import Column, encode
from nightfold.scans.layout import OWN_DIMENSIONS, Layout, free_name, lay_out, read_settings, with_missing

NO_SHOT = -1
"""``shot_id`` of a hole in the grid."""

_NOTHING: Mapping[str, Any] = MappingProxyType({})


def build_dataset(
    table: pd.DataFrame,
    axes: Sequence[str],
    *,
    co_moving: Mapping[str, str],
    observables: Sequence[str],
    units: Mapping[str, str],
    mixed: Mapping[str, Sequence[str]] = _NOTHING,
    sensors: Sequence[str] = (),
    descriptions: Mapping[str, str] = _NOTHING,
    attrs: Mapping[str, Any] = _NOTHING,
    tolerance: float | Mapping[str, float] | None = None,
) -> xr.Dataset:
    """Return a scan as an `xarray.Dataset`; the order of the shots in the table does not matter.

    Parameters
    ----------
    table : DataFrame
        One row a shot: ``uid``, ``shot_id`` (int), ``started`` (datetime64, UTC), ``set_aside`` (bool), a column
        for each axis, co-moving parameter and observable, and ``<observable>_stderr`` where there is one.
    axes : sequence of str
        Swept parameters; none for mere repeats.
    co_moving : mapping of str to str
        Parameter -> the axis that it is a function of.
    observables : sequence of str
        Names; ``name[cloud]`` becomes variable ``name`` with a dimension ``cloud`` (``name`` alone, beside those,
        its cloud ``""``).
    units : mapping of str to str
        Units of parameters and observables; empty ones are left out.
    mixed : mapping of str to sequence of str
        Parameter -> the axes that it is a function of.
    sensors : sequence of str
        Further columns of numbers, as they stand.
    descriptions : mapping of str to str
        Long names; default the name itself.
    attrs : mapping
        Attributes of the dataset: text, numbers or lists of those; None is left out.
    tolerance : float or mapping of axis to float, optional
        Merge tolerance, default 1e-6 of the span of each axis; kept in its attribute ``merge_tolerance``.

    Returns
    -------
    Dataset
        Dimensions: the axes, in order (numbers merged and sorted, text sorted, false before true), then
        ``repeat``, in order of start, where a point has several shots. If a grid of two axes or more would have over
        4 times as many points as there are shots: ``shot`` alone, in order of start, the axes being coordinates
        on it. Without axes: ``repeat`` alone. A shot without a value for an axis is at NaN (text: ``""``).
        Variables: the observables and their ``_stderr``, ``started`` (UTC, without zone), ``shot_id``,
        ``uid``, ``set_aside``. Holes are NaN, NaT, -1, ``""`` and False.

    Notes
    -----
    A co-moving parameter is a coordinate along its axis, a mixed one along its axes; should it take several values
    at one point after all, it is spread over all dimensions. A parameter that is called like one of the dimensions
    above gets a ``_`` behind its name. Attributes follow CF-1.11 (``units``, ``long_name``, ``ancillary_variables``).
    """
    rows = table
    if not (table["started"].is_monotonic_increasing and table["started"].is_unique):
        rows = table.sort_values(["started", "uid"], kind="stable", ignore_index=True)
    layout = lay_out(rows, axes, tolerance)
    names = _Names(units, descriptions)
    coords = {free_name(axis): _axis(rows, layout, axis, names) for axis in axes}
    for follower, leader in co_moving.items():
        coords[free_name(follower)] = _follower(rows, layout, follower, leader, names)
    for name, leaders in mixed.items():
        coords[free_name(name)] = _mixed(rows, layout, name, leaders, names)
    variables = _bookkeeping(rows, layout)
    taken = (*OWN_DIMENSIONS, *variables, *coords)
    variables |= _observables(rows, layout, observables, names, taken)
    for sensor in sensors:
        name = free_name(sensor, (*taken, *variables))
        values = layout.spread(rows[sensor].to_numpy(np.float64, na_value=np.nan), np.nan)
        variables[name] = xr.Variable(layout.dims, values, names.describe(sensor))
    return xr.Dataset(variables, coords, attrs={"Conventions": "CF-1.11"} | _plain_attrs(attrs))


@dataclass(frozen=True, slots=True)
class _Names:
    units: Mapping[str, str]
    descriptions: Mapping[str, str]

    def describe(self, name: str, *others: str) -> dict[str, Any]:
        """Return the attributes of a variable, looked up by its name and then by the others."""
        lookups = (name, *others)
        unit = next((self.units[each] for each in lookups if self.units.get(each)), None)
        text = next((self.descriptions[each] for each in lookups if self.descriptions.get(each)), name)
        return {"long_name": text} | ({"units": unit} if unit else {})


def _array(values: NDArray[Any]) -> NDArray[Any]:
    return values.astype(np.str_) if values.dtype == object else values


def _axis(rows: pd.DataFrame, layout: Layout, axis: str, names: _Names) -> xr.Variable:
    attrs = names.describe(axis)
    if free_name(axis) != axis:
        attrs["original_name"] = axis
    column = layout.points.get(axis)
    if column is None:
        return xr.Variable(layout.dims, _array(_own_values(encode(read_settings(rows, axis), 0.0))), attrs)
    if column.numeric:
        attrs["merge_tolerance"] = column.tolerance
    return xr.Variable((free_name(axis),), _array(column.values), attrs)


def _own_values(column: Column) -> NDArray[Any]:
    column = with_missing(column)
    return column.values[column.codes]


def _follower(rows: pd.DataFrame, layout: Layout, name: str, leader: str, names: _Names) -> xr.Variable:
    """Return a co-moving parameter as a coordinate along its leader, if it has one value at each point."""
    attrs = names.describe(name) | {"co_moving_with": free_name(leader)}
    column = with_missing(encode(read_settings(rows, name)))
    axis = layout.points.get(leader)
    if axis is not None:
        pairs = dict(zip(axis.codes.tolist(), column.codes.tolist(), strict=True))
        if all(
            pairs[place] == code
            for place, code in zip(axis.codes.tolist(), column.codes.tolist(), strict=True)
        ):
            along = column.values[[pairs[place] for place in range(axis.points)]]
            return xr.Variable((free_name(leader),), _array(along), attrs)
    values = _array(column.values[column.codes])
    hole = {"f": np.nan, "b": False}.get(values.dtype.kind, "")
    return xr.Variable(layout.dims, layout.spread(values, hole), attrs)


def _mixed(
    rows: pd.DataFrame, layout: Layout, name: str, leaders: Sequence[str], names: _Names
) -> xr.Variable:
    """Return a parameter as a coordinate along several axes, if it has one value at each of their points."""
    attrs = names.describe(name) | {"co_moving_with": " ".join(free_name(leader) for leader in leaders)}
    values = rows[name].to_numpy(np.float64, na_value=np.nan)
    if layout.points:
        axes = [layout.points[leader] for leader in leaders]
        along = np.full([axis.points for axis in axes], np.nan)
        places = tuple(axis.codes for axis in axes)
        along[places] = values
        if np.array_equal(along[places], values, equal_nan=True):
            return xr.Variable(tuple(free_name(leader) for leader in leaders), along, attrs)
    return xr.Variable(layout.dims, layout.spread(values, np.nan), attrs)


def _bookkeeping(rows: pd.DataFrame, layout: Layout) -> dict[str, xr.Variable]:
    started = pd.to_datetime(rows["started"], utc=True).dt.tz_localize(None).to_numpy("datetime64[us]")
    uids = rows["uid"].to_numpy(object).astype(np.str_)
    described: dict[str, tuple[NDArray[Any], Any, str]] = {
        "started": (started, np.datetime64("NaT", "us"), "start of the shot, UTC"),
        "shot_id": (
            rows["shot_id"].to_numpy(np.int64),
            NO_SHOT,
            "number of the shot in its store, -1 for none",
        ),
        "uid": (uids, "", "unique name of the shot"),
        "set_aside": (rows["set_aside"].to_numpy(np.bool_), False, "whether the shot is set aside"),
    }
    variables = {
        name: xr.Variable(layout.dims, layout.spread(values, hole), {"long_name": text})
        for name, (values, hole, text) in described.items()
    }
    variables["started"].attrs["time_zone"] = "UTC"
    return variables


def _by_cloud(observables: Sequence[str], units: Mapping[str, str]) -> dict[str, dict[str | None, str]]:
    """Return variable -> cloud (None for none) -> observable; clouds in another unit than the first stay apart."""
    variables: dict[str, dict[str | None, str]] = {}
    known: dict[str, str] = {}
    for observable in observables:
        name, cloud = split_cloud(observable)
        unit = units.get(observable) or known.get(name, "")
        if known.setdefault(name, unit) in ("", unit):
            known[name] = unit
        else:
            name, cloud = observable, None
        variables.setdefault(name, {})[cloud] = observable
    return variables


def _cloud_names(variables: Mapping[str, Mapping[str | None, str]]) -> list[str]:
    """Return all clouds, sorted; the nameless one only if a variable has it beside others."""
    return sorted({c or "" for clouds in variables.values() if set(clouds) != {None} for c in clouds})


def _readings(
    rows: pd.DataFrame, layout: Layout, columns: Mapping[str | None, str], clouds: Sequence[str]
) -> xr.Variable:
    """Return one column, or one a cloud, as an array; NaN where a cloud has none."""
    spread = {
        cloud or "": layout.spread(rows[column].to_numpy(np.float64, na_value=np.nan), np.nan)
        for cloud, column in columns.items()
        if column in rows
    }
    if set(columns) == {None}:
        return xr.Variable(layout.dims, spread[""])
    hole = np.full(layout.shape, np.nan)
    return xr.Variable(
        (*layout.dims, "cloud"), np.stack([spread.get(cloud, hole) for cloud in clouds], axis=-1)
    )


def _observables(
    rows: pd.DataFrame, layout: Layout, observables: Sequence[str], names: _Names, taken: Sequence[str]
) -> dict[str, xr.Variable]:
    """Return the observables and their standard uncertainties, and the coordinate of the clouds if there are any."""
    by_cloud = _by_cloud(observables, names.units)
    clouds = _cloud_names(by_cloud)
    variables: dict[str, xr.Variable] = {}
    for name, columns in by_cloud.items():
        variable = free_name(name, taken)
        stderr = f"{variable}_stderr"
        attrs = names.describe(name, *columns.values())
        uncertain = {cloud: f"{column}_stderr" for cloud, column in columns.items()}
        variables[variable] = _readings(rows, layout, columns, clouds)
        variables[variable].attrs = dict(attrs)
        if any(column in rows for column in uncertain.values()):
            variables[variable].attrs["ancillary_variables"] = stderr
            variables[stderr] = _readings(rows, layout, uncertain, clouds)
            variables[stderr].attrs = attrs | {"long_name": f"standard uncertainty of {attrs['long_name']}"}
    if clouds:
        variables["cloud"] = xr.Variable(("cloud",), np.array(clouds, np.str_), {"long_name": "cloud"})
    return variables


def _plain_attrs(attrs: Mapping[str, Any]) -> dict[str, Any]:
    """Return attributes of kinds that a netCDF file can hold; truths as 0 and 1."""
    plain: dict[str, Any] = {}
    for name, value in attrs.items():
        if isinstance(value, bool | np.bool_):
            plain[name] = int(value)
        elif isinstance(value, str | int | float | np.number):
            plain[name] = value
        elif isinstance(value, list | tuple) and value:
            plain[name] = [each if isinstance(each, int | float) else str(each) for each in value]
        elif value is not None:
            plain[name] = str(value)
    return plain
