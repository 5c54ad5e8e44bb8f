"""Charts of a scan: its points over one axis, or as a map over two."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from nightfold.concise import short
from nightfold_cli.canvas import Line
from nightfold_cli.plots import Chart, Label, Points, shading
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.scans.axes import Axis
    from nightfold_cli.points import Point

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
) -> Chart:
    """Return a chart of means with bars of one stderr, and a curve if there is one.

    Drawn are the readings that `observables` names, at most four; without them, the one that `y` names.
    """
    across = [float(point.at[0]) for point in points]
    series = []
    for name in observables or (y.name,):
        readings = [point.readings[name] for point in points]
        means, bars = [reading.mean for reading in readings], [reading.stderr for reading in readings]
        series.append(Points(across, means, bars, name=name))
    return Chart(
        series[0],
        x,
        y,
        width=min(width, _WIDEST) - 1,
        height=height,
        curve=curve,
        unicode=unicode,
        others=series[1:],
    )


def map_of_points(
    points: Sequence[Point], axes: Sequence[Axis], observable: str, *, unicode: bool
) -> list[Line]:
    """Return a map of means as shades: the longer axis to the right, the other one upwards."""
    across, up = (0, 1) if axes[0].points >= axes[1].points else (1, 0)
    means = {(point.at[across], point.at[up]): point.readings[observable].mean for point in points}
    columns, rows = axes[across].values, axes[up].values[::-1]
    grid = [[means.get((column, row), math.nan) for column in columns] for row in rows]
    shades = shading(grid, unicode=unicode)
    finite = [value for row in grid for value in row if math.isfinite(value)]
    if not finite:
        return [[("(nothing finite to draw)", "label")]]
    names = [setting(row) for row in rows]
    margin = max(map(len, names))
    body: list[Line] = [
        [(f"  {name.rjust(margin)} ", "label"), ("|", "axis"), (text, "data"), ("|", "axis")]
        for name, text in zip(names, shades, strict=True)
    ]
    ends = f"{setting(columns[0])} to {setting(columns[-1])}"
    return [
        [(f"  {_title(axes[up])} upwards", "label")],
        *body,
        [(f"  {' ' * margin}  {_title(axes[across])}, {ends}", "label")],
        [(f"  {' ' * margin}  blank {short(min(finite))}, full {short(max(finite))}, ?? no shot", "label")],
    ]


def _title(axis: Axis) -> str:
    """Return name and unit of an axis."""
    return f"{axis.parameter} ({axis.unit})" if axis.unit else axis.parameter
