"""``nightfold scan KEY``: one scan, its points and a chart."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import scan_key
from nightfold_cli.charts import chart_of_points, map_of_points
from nightfold_cli.concise import concise, short
from nightfold_cli.failures import UsageError
from nightfold_cli.localtimes import LocalTimes
from nightfold_cli.opening import local_times, opened
from nightfold_cli.points import Point, Reading, points_of
from nightfold_cli.render import Cell, Column, Row, Screen
from nightfold_cli.scantext import axis_line, entry, repeats_text, status
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.scans.scan import Scan

HELP = "show one scan: its points and a chart"
EXAMPLES = (
    "nightfold scan loss-coarse",
    "nightfold scan loss-coarse#2 -o temperature",
    "nightfold scan 41 --json",
)
_MOST_POINTS = 40
_HEIGHT = 16


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "key", metavar="KEY", type=scan_key, help="id, label (its newest round) or label#round"
    )
    parser.add_argument(
        "-o", "--observable", metavar="NAME", help="chart this one (default: the machine's main one)"
    )
    parser.add_argument("--set-aside", action="store_true", help="with the shots that are set aside")
    parser.add_argument(
        "--points", action="store_true", help=f"list the points even if more than {_MOST_POINTS}"
    )


def run(args: Namespace) -> int:
    """Show the scan."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        scan = store.scan(args.key)
        observables = _observables(scan, args.observable)
        axes = [axis.parameter for axis in scan.axes]
        points = points_of(scan.table(set_aside=args.set_aside), axes, observables)
        units = {name: unit or "" for name, unit in _units(scan, observables).items()}
        times = local_times(store)
    if screen.json:
        screen.answer({"scan": entry(scan), "points": [_entry(scan, point) for point in points]})
        return 0
    if screen.terminal:
        _header(screen, scan, times)
    if not screen.terminal or args.points or len(points) <= _MOST_POINTS:
        _tabulate(screen, scan, points, observables, units)
    else:
        screen.note(f"{len(points)} points; --points lists them")
    if observables:
        _draw(screen, scan, points, observables[0], units[observables[0]])
    return 0


def _observables(scan: Scan, asked: str | None) -> list[str]:
    """Return the observables to show, the one to draw first."""
    if asked and asked not in scan.observables:
        raise UsageError(
            f"scan {scan.key} has no observable {asked!r}; it has {', '.join(scan.observables) or 'none'}"
        )
    first = asked or scan.main_observable
    return sorted(scan.observables, key=lambda name: (name != first, scan.observables.index(name)))


def _units(scan: Scan, observables: Sequence[str]) -> dict[str, str]:
    """Return the units of observables."""
    return {name: scan.units.get(name, "") for name in observables}


def _header(screen: Screen, scan: Scan, times: LocalTimes) -> None:
    """Say what the scan is."""
    origin = {"label": "by label", "found": "found by itself", "declared": "declared"}.get(
        scan.origin, scan.origin
    )
    screen.heading(scan.key, f"{scan.sequence} on {scan.machine}, {origin}, {status(scan)}")
    aside = f", and {scan.set_aside} set aside" if scan.set_aside else ""
    first, last = times.local(scan.first, scan.machine), times.local(scan.last, scan.machine)
    until = f"{last:%H:%M:%S %Z}" if first.date() == last.date() else f"{last:%Y-%m-%d %H:%M:%S %Z}"
    screen.fields(
        [
            *(("axis", f"{axis_line(axis)}, {axis.points} points") for axis in scan.axes),
            ("shots", f"{scan.shots}, {repeats_text(scan)} a point{aside}"),
            ("taken", f"{first:%Y-%m-%d %H:%M:%S} to {until}"),
        ]
    )


def _tabulate(
    screen: Screen, scan: Scan, points: Sequence[Point], observables: Sequence[str], units: dict[str, str]
) -> None:
    """Draw a line a point: mean with its stderr, and the scatter of single shots."""
    columns = [
        Column(_named(axis.parameter, axis.unit), right=axis.low is not None, plain_name=axis.parameter)
        for axis in scan.axes
    ]
    columns.append(Column("shots", right=True))
    for rank, name in enumerate(observables):
        columns.append(Column(_named(name, units[name]), right=True, spare=2 * rank, plain_name=name))
        columns.append(Column("scatter", right=True, spare=2 * rank + 1, plain_name=f"{name}_scatter"))
    rows: list[Row] = [
        [
            *(setting(value) for value in point.at),
            str(point.shots),
            *(cell for name in observables for cell in _cells(point.readings[name])),
        ]
        for point in points
    ]
    screen.table(columns, rows, empty="no shots but those set aside; --set-aside shows them")


def _cells(reading: Reading) -> tuple[Cell, Cell]:
    """Return mean and scatter of a point."""
    if not reading.count:
        return Cell("-", "nan"), Cell("-", "nan")
    known = reading.stderr > 0
    mean = concise(reading.mean, reading.stderr) if known else short(reading.mean)
    scatter = short(reading.scatter) if reading.count > 1 else "-"
    return Cell(mean, repr(reading.mean)), Cell(scatter, repr(reading.scatter))


def _draw(screen: Screen, scan: Scan, points: Sequence[Point], observable: str, unit: str) -> None:
    """Draw the observable over one axis, or as a map over two."""
    if not screen.terminal:
        return
    numeric = [axis for axis in scan.axes if axis.low is not None]
    if len(scan.axes) == 1 and numeric:
        screen.heading(observable)
        chart = chart_of_points(points, numeric[0], observable, unit, screen.width, _HEIGHT, screen.unicode)
        screen.chart(chart.lines())
        screen.note(f"next: nightfold fit {scan.key} MODEL -o {observable}")
    elif len(scan.axes) == 2:
        screen.heading(observable, unit)
        screen.chart(map_of_points(points, scan.axes, observable, unicode=screen.unicode))
        screen.note(f"next: nightfold fit {scan.key} MODEL -o {observable} --along {scan.axes[0].parameter}")


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
