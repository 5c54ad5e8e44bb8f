"""Charts of a scan: its points over one axis, or as a map over two."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from nightfold.concise import short
from nightfold_cli.canvas import ASCII, UNICODE, Line
from nightfold_cli.plots import Chart, Label, Points, shading
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.scans.axes import Axis
    from nightfold_cli.points import Point, Setting

_WIDEST = 100


def chart_of_points(
    points: Sequence[Point],
    x: Label,
    y: Label,
    width: int,
    height: int,
    unicode: bool,
    curve: tuple[Sequence[float], Sequence[float]] | None = None,
    observables: Sequence[str] = (),
    outliers: Sequence[tuple[float, float]] = (),
) -> Chart:
    """Return a chart of means with bars of one stderr, and a curve if there is one.

    Drawn are the readings that `observables` names, at most four; without them, the one that `y` names. Outliers are
    crosses, unless they are so far off that they would flatten all else; those are left out.
    """
    across = [float(point.at[0]) for point in points]
    series = []
    for name in observables or (y.name,):
        readings = [point.readings[name] for point in points]
        means, bars = [reading.mean for reading in readings], [reading.stderr for reading in readings]
        series.append(Points(across, means, bars, name=name))
    return Chart(
        _with_outliers(series[0], outliers) if outliers else series[0],
        x,
        y,
        width=min(width, _WIDEST) - 1,
        height=height,
        curve=curve,
        unicode=unicode,
        others=series[1:],
    )


def _with_outliers(points: Points, outliers: Sequence[tuple[float, float]]) -> Points:
    """Return a series with the outliers that lie within its span beyond its ends."""
    known = [value for value in points.y if math.isfinite(value)] or [0.0]
    low, high = min(known), max(known)
    span = high - low or abs(high)
    near = [(x, y) for x, y in outliers if low - span <= y <= high + span]
    return Points(
        [*points.x, *(x for x, _ in near)],
        [*points.y, *(y for _, y in near)],
        [*points.spread, *([math.nan] * len(near))],
        [*([False] * len(points.x)), *([True] * len(near))],
        name=points.name,
    )


def map_of_points(
    points: Sequence[Point], axes: Sequence[Axis], observable: str, *, unicode: bool
) -> list[Line]:
    """Return a map of means as shades: the longer axis to the right, the other one upwards."""
    across, up = (0, 1) if axes[0].points >= axes[1].points else (1, 0)
    means = {(point.at[across], point.at[up]): point.readings[observable].mean for point in points}
    sides = [Side(_title(axes[place]), axes[place].values) for place in (across, up)]
    return map_of_values(means, *sides, unicode=unicode, hole="no shot")


@dataclass(frozen=True, slots=True)
class Side:
    """One side of a map: its title, and the settings along it."""

    title: str
    values: Sequence[Setting]


def map_of_values(
    values: Mapping[tuple[Setting, Setting], float],
    across: Side,
    up: Side,
    *,
    unicode: bool,
    hole: str,
    doubted: Collection[tuple[Setting, Setting]] = (),
) -> list[Line]:
    """Return a map of values as shades, by their settings across and up; doubted ones are crosses.

    `hole` says what is not there where there is no value.
    """
    columns, rows = across.values, up.values[::-1]
    cells = [[(column, row) for column in columns] for row in rows]
    grid = [[math.nan if at in doubted else values.get(at, math.nan) for at in row] for row in cells]
    finite = [value for row in grid for value in row if math.isfinite(value)]
    if not finite and not doubted:
        return [[("(nothing finite to draw)", "label")]]
    cross = (UNICODE if unicode else ASCII).flagged * 2
    shades = shading(grid, unicode=unicode) or ["??" * len(columns)] * len(rows)
    names = [setting(row) for row in rows]
    margin = max(map(len, names))
    body: list[Line] = [
        [
            (f"  {name.rjust(margin)} ", "label"),
            ("|", "axis"),
            (
                "".join(
                    cross if at in doubted else text[2 * place : 2 * place + 2]
                    for place, at in enumerate(row)
                ),
                "data",
            ),
            ("|", "axis"),
        ]
        for name, text, row in zip(names, shades, cells, strict=True)
    ]
    ends = f"{setting(columns[0])} to {setting(columns[-1])}"
    key = [
        *([f"blank {short(min(finite))}, full {short(max(finite))}"] if finite else []),
        *([f"{cross} not to be trusted"] if doubted else []),
        f"?? {hole}",
    ]
    return [
        [(f"  {up.title} upwards", "label")],
        *body,
        [(f"  {' ' * margin}  {across.title}, {ends}", "label")],
        [(f"  {' ' * margin}  {', '.join(key)}", "label")],
    ]


def _title(axis: Axis) -> str:
    """Return name and unit of an axis."""
    return f"{axis.parameter} ({axis.unit})" if axis.unit else axis.parameter
