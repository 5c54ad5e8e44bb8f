"""``nightfold scan KEY``: one scan, its points and a chart."""

from __future__ import annotations

import math
import shlex
from argparse import ArgumentParser, Namespace
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from nightfold.concise import Scale, scale_of, short
from nightfold_cli.arguments import add_relative, add_scan_key, relation
from nightfold_cli.arrangedtext import in_full
from nightfold_cli.canvas import MOST_SERIES
from nightfold_cli.charts import chart_of_points, map_of_points
from nightfold_cli.known import drawn_together
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes
from nightfold_cli.naming import name_in, named_scan, shared_names
from nightfold_cli.notetext import note_fields, texts_by_subject
from nightfold_cli.opening import local_times, opened
from nightfold_cli.plots import Label
from nightfold_cli.points import Point, Reading, points_of
from nightfold_cli.render import Screen
from nightfold_cli.scantext import (
    axis_line,
    counted,
    entry,
    order_line,
    relative_line,
    repeats_text,
    status,
    title,
)
from nightfold_cli.settings import aligned

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.scans.scan import Scan

HELP = "show one scan: its points and a chart"
EXAMPLES = (
    "nightfold scan loss-coarse",
    "nightfold scan loss-coarse#2 -o temperature",
    "nightfold scan loss-coarse --relative-to reference",
    "nightfold scan 41 --json",
)
_MOST_POINTS = 40
_RELATIVE = "relative to reference"
_HEIGHT = 16
_FINE = 1e-3  # of the largest mean, where no scatter says how fine to write a column


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    add_scan_key(parser)
    parser.add_argument(
        "-o", "--observable", metavar="NAME", help="chart this one (default: the machine's main one)"
    )
    parser.add_argument("--set-aside", action="store_true", help="with the shots that are set aside")
    parser.add_argument(
        "--points", action="store_true", help=f"list the points even if more than {_MOST_POINTS}"
    )
    add_relative(parser)


def run(args: Namespace) -> int:
    """Show the scan."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        scan = named_scan(store, args.key, screen)
        name = name_in(store, scan)
        drawn = drawn_together(scan, args.observable)
        observables = drawn if args.relative_to else _all_observables(scan, drawn)
        axes = [axis.parameter for axis in scan.axes]
        table = scan.table(set_aside=args.set_aside, observables=observables, **relation(args))
        points = points_of(table, axes, observables)
        units, related = table.attrs["units"], table.attrs.get("relative")
        times = local_times(store)
        arranged = [in_full(item, shared_names(store), times) for item in scan.arrangements]
        notes = texts_by_subject(store)
    if screen.json:
        listed = [_entry(scan, point) for point in points]
        screen.answer({"scan": entry(scan, name, notes), "relative": related, "points": listed})
        return 0
    if screen.terminal:
        _header(screen, scan, name, times, arranged, notes.get(f"scan {scan.id}", []), related, table)
    if not screen.terminal or args.points or len(points) <= _MOST_POINTS:
        _tabulate(screen, scan, points, observables, units)
    else:
        screen.note(f"{counted(len(points), 'point')}; --points lists them")
    if drawn:
        _draw(screen, scan, name, points, drawn, _RELATIVE if related else units[drawn[0]])
    return 0


def _all_observables(scan: Scan, first: Sequence[str]) -> list[str]:
    """Return the observables to show, those to draw first."""
    return [*first, *(name for name in scan.observables if name not in first)]


def _header(
    screen: Screen,
    scan: Scan,
    name: str,
    times: LocalTimes,
    arranged: Sequence[str],
    notes: Sequence[str],
    related: Mapping[str, Any] | None,
    table: pd.DataFrame,
) -> None:
    """Say what the scan is."""
    order = order_line(scan, _only_axis(scan, table))
    placeless = _placeless(scan, table)
    origin = {"label": "by label", "found": "found by itself", "declared": "declared"}.get(
        scan.origin, scan.origin
    )
    screen.heading(title(scan, name), f"{scan.sequence} on {scan.machine}, {origin}, {status(scan)}")
    aside = f", and {scan.set_aside} set aside" if scan.set_aside else ""
    first, last = times.local(scan.first, scan.machine), times.local(scan.last, scan.machine)
    until = f" to {last:%H:%M:%S %Z}" if first.date() == last.date() else f" to {last:%Y-%m-%d %H:%M:%S %Z}"
    until = until if last > first else f" {last:%Z}"
    where = "at scattered points" if scan.scattered else f"{repeats_text(scan)} a point"
    screen.fields(
        [
            *(("axis", f"{axis_line(axis)}, {counted(axis.points, 'point')}") for axis in scan.axes),
            ("shots", f"{scan.shots}, {where}{aside}"),
            ("taken", f"{first:%Y-%m-%d %H:%M:%S}{until}"),
            *([("order", order)] if order else []),
            *([("no place", placeless)] if placeless else []),
            *([("relative", relative_line(related))] if related else []),
            *(("by hand", text) for text in arranged),
            *note_fields(notes, screen),
        ]
    )


def _only_axis(scan: Scan, table: pd.DataFrame) -> list[float]:
    """Return the values of the one axis that a scan has, a shot each; nothing where there are several, or words."""
    if len(scan.axes) != 1 or scan.axes[0].low is None:
        return []
    values = table[scan.axes[0].parameter]
    return [float(value) for value in values if value is not None and math.isfinite(value)]


def _placeless(scan: Scan, table: pd.DataFrame) -> str:
    """Return how many shots have no place on an axis: no value there, or one that is not finite."""
    found = []
    for axis in scan.axes:
        values = table[axis.parameter].tolist()
        lost = sum(
            value is None or (isinstance(value, float) and not math.isfinite(value)) for value in values
        )
        if lost:
            found.append(f"{counted(lost, 'shot')} without a finite {axis.parameter}")
    return ", ".join(found)


def _tabulate(
    screen: Screen, scan: Scan, points: Sequence[Point], observables: Sequence[str], units: dict[str, str]
) -> None:
    """Draw a line a point: mean and scatter of single shots, to the same place in a whole column."""
    scales = {name: _scale([point.readings[name] for point in points]) for name in observables}
    settings = [aligned([point.at[rank] for point in points]) for rank in range(len(scan.axes))]
    columns = [
        Column(_named(axis.parameter, axis.unit), right=axis.low is not None, plain_name=axis.parameter)
        for axis in scan.axes
    ]
    columns.append(Column("shots", right=True))
    kinds = {name: _kinds(screen, [point.readings[name] for point in points]) for name in observables}
    for rank, name in enumerate(observables):
        scale = scales[name]
        power = "1" + scale.suffix if scale and scale.suffix else ""
        head = _named(name, f"{power} {units[name]}".strip())
        columns.append(Column(head, right=True, spare=2 * rank, plain_name=name))
        columns += [
            Column(kind, right=True, spare=2 * rank + 1, plain_name=f"{name}_{kind}", quiet=True)
            for kind in kinds[name]
        ]
    rows: list[Row] = [
        [
            *(column[place] for column in settings),
            str(point.shots),
            *(
                cell
                for name in observables
                for cell in _cells(point.readings[name], scales[name], kinds[name])
            ),
        ]
        for place, point in enumerate(points)
    ]
    screen.table(columns, rows, empty="no shots but those set aside; --set-aside shows them")


def _kinds(screen: Screen, readings: Sequence[Reading]) -> tuple[str, ...]:
    """Return what stands beside the means: their scatter where points are repeated, else the stderr if given."""
    if not screen.terminal:
        return ("scatter", "stderr")
    if any(reading.count > 1 for reading in readings):
        return ("scatter",)
    return ("stderr",) if any(math.isfinite(reading.stderr) for reading in readings) else ()


def _scale(readings: Sequence[Reading]) -> Scale | None:
    """Return the place to which a column is written, from its largest mean and its typical scatter.

    Where there is neither scatter nor stderr, the largest mean has five digits.
    """
    means = [abs(reading.mean) for reading in readings if math.isfinite(reading.mean)]
    scatters = sorted(
        scatter
        for reading in readings
        for scatter in [reading.scatter if reading.count > 1 else reading.stderr]
        if scatter > 0
    )
    if not means:
        return None
    return scale_of(max(means), scatters[len(scatters) // 2] if scatters else max(means) * _FINE)


def _cells(reading: Reading, scale: Scale | None, kinds: Sequence[str]) -> list[Cell]:
    """Return the mean of a point, and what stands beside it."""

    def text(number: float) -> str:
        if not math.isfinite(number):
            return "-"
        return scale.digits(number) if scale else short(number)

    beside = {"scatter": reading.scatter, "stderr": reading.stderr}
    return [
        Cell(text(reading.mean), repr(reading.mean)),
        *(
            Cell("± " + text(beside[kind]) if math.isfinite(beside[kind]) else "", repr(beside[kind]))
            for kind in kinds
        ),
    ]


def _draw(
    screen: Screen, scan: Scan, name: str, points: Sequence[Point], observables: Sequence[str], unit: str
) -> None:
    """Draw observables over one axis, or each as a map over two; they are clouds if there are several."""
    if not screen.terminal:
        return
    known = {each: sum(math.isfinite(point.readings[each].mean) for point in points) for each in observables}
    if max(known.values()) < 2:
        screen.note("a chart needs two points")
        return
    drawn = [each for each in observables if known[each]][:MOST_SERIES]
    related = " --relative-to reference" if unit == _RELATIVE else ""
    fit = f"next: nightfold fit {name} MODEL -o {shlex.quote(drawn[0])}{related}"
    numeric = [axis for axis in scan.axes if axis.low is not None]
    if len(scan.axes) == 1 and numeric:
        screen.gap()
        x = Label(numeric[0].parameter, numeric[0].unit)
        y = Label(_title(drawn), unit)
        chart = chart_of_points(points, x, y, screen.width, _HEIGHT, screen.unicode, observables=drawn)
        screen.chart(chart.lines())
        screen.note(chart.legend)
        if len(drawn) < len(observables):
            screen.note("not drawn: " + ", ".join(each for each in observables if each not in drawn))
        screen.note(fit)
    elif scan.scattered:
        screen.note(f"scattered points make no map; next: nightfold export {name} FILE")
    elif len(scan.axes) == 2:
        for each in drawn:
            screen.heading(each, unit)
            screen.chart(map_of_points(points, scan.axes, each, unicode=screen.unicode))
        screen.note(f"{fit} --along {scan.axes[0].parameter}")


def _title(drawn: Sequence[str]) -> str:
    """Return what is drawn: an observable, or the one that several are clouds of."""
    from nightfold.card import without_cloud

    return drawn[0] if len(drawn) == 1 else without_cloud(drawn[0])


def _named(name: str, unit: str) -> str:
    """Return a column's head: ``coil_current (A)``."""
    return f"{name} ({unit})" if unit else name


def _entry(scan: Scan, point: Point) -> dict[str, Any]:
    """Return a point for JSON."""
    return {
        "at": dict(zip((axis.parameter for axis in scan.axes), point.at, strict=True)),
        "shots": point.shots,
        "observables": {
            name: {
                "count": reading.count,
                "mean": reading.mean,
                "scatter": reading.scatter,
                "stderr": reading.stderr,
            }
            for name, reading in point.readings.items()
        },
    }
