"""``nightfold scans``: the scans, with axes and a small trend."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Mapping, Sequence
from datetime import date
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

from nightfold_cli.arguments import add_last, say_earlier, the_last
from nightfold_cli.known import check_machine, check_sequence
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes, offset_if_it_changes
from nightfold_cli.naming import ambiguous_labels, name_of
from nightfold_cli.notetext import texts_by_subject
from nightfold_cli.opening import local_times, moment, opened
from nightfold_cli.render import Screen
from nightfold_cli.scantext import axis_line, entry, grid, order_mark, repeats_text, span, status, title
from nightfold_cli.sparklines import PLAIN_HEIGHTS

if TYPE_CHECKING:
    from nightfold.scans.axes import Axis
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

HELP = "list the scans, with axes and a small trend"
EXAMPLES = (
    "nightfold scans",
    "nightfold scans --since 2026-10-05 --sequence hold-in-trap",
    "nightfold scans --json | jq '.scans[].label'",
)
_ON_SCREEN = 20
_TREND = 12
_NARROW = 90
_NONE = "no scans like that; without options all are listed"
_NONE_YET = "no scans yet; 'nightfold take FILE…' takes shots in"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("--sequence", metavar="NAME", help="of this sequence only")
    parser.add_argument("--since", metavar="TIME", help="that ended at this day or time, or later")
    parser.add_argument("--until", metavar="TIME", help="that began before this day or time")
    add_last(parser, _ON_SCREEN)


def run(args: Namespace) -> int:
    """List the scans, the newest last."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        since, until = moment(args.since, store, args.machine), moment(args.until, store, args.machine)
        every = store.scans()
        check_sequence(args.sequence, [scan.sequence for scan in every])
        ambiguous = ambiguous_labels(every)
        found = [
            scan
            for scan in sorted(every, key=lambda scan: scan.first)
            if (not args.machine or scan.machine == args.machine)
            and (not args.sequence or scan.sequence == args.sequence)
            and (since is None or scan.last >= since)
            and (until is None or scan.first < until)
        ]
        listed = the_last(args, screen, found)
        names = {scan.id: name_of(scan, ambiguous) for scan in listed}
        times = local_times(store)
        empty = _NONE if every else _NONE_YET
        if screen.json:
            notes = texts_by_subject(store)
            screen.answer({"scans": [entry(scan, names[scan.id], notes) for scan in listed]})
        elif screen.terminal:
            _draw(screen, listed, names, _nights(store, listed), empty)
            if listed:
                screen.note(times.note(scan.machine for scan in listed))
            if any(order_mark(scan, axis) for scan in listed for axis in scan.axes):
                screen.note("↑ ↓ taken in this order: a drift in time would look like a feature")
            say_earlier(screen, found, listed)
        else:
            _tabulate(screen, listed, names, times, empty)
    return 0


def _draw(
    screen: Screen, scans: Sequence[Scan], names: Mapping[int, str], nights: Sequence[date], empty: str
) -> None:
    """Draw two or more lines a scan, night by night."""
    trends = {scan.main_observable for scan in scans if scan.main_observable}
    shared = trends.copy().pop() if len(trends) == 1 else None
    several = len({scan.machine for scan in scans}) > 1
    columns = [
        Column("scan", wraps=True),
        Column("axes", wraps=True),
        Column("points"),
        Column("shots"),
        Column("from"),
        Column(shared or "trend", spare=1),
    ]
    rows: list[Row] = []
    for place, (scan, night) in enumerate(zip(scans, nights, strict=True)):
        if not place or night != nights[place - 1]:
            rows.append([Cell(f"{night:%a %Y-%m-%d}", strong=True), *[""] * 5])
        aside = f"{scan.set_aside} aside" if scan.set_aside else ""
        began = scan.first.astimezone(ZoneInfo(scan.zone))
        trend = trend_of(scan, unicode=screen.unicode)
        rows.append(
            [
                Cell.of((title(scan, names[scan.id]), _stream(scan) if several else scan.sequence)),
                Cell.of(_axes(scan, narrow=screen.width < _NARROW)),
                Cell.of((grid(scan), "scattered" if scan.scattered else f"x {repeats_text(scan)}")),
                Cell.of((str(scan.shots), aside)),
                Cell.of(
                    (f"{began:%H:%M}{offset_if_it_changes(began)}", "" if scan.complete else status(scan))
                ),
                Cell.of((trend, "" if shared else scan.main_observable or "")),
            ]
        )
    screen.table(columns, rows, empty=empty, spaced=True)


def _nights(store: Store, scans: Sequence[Scan]) -> list[date]:
    """Return the night each scan began in."""
    found: dict[int, date] = {}
    for machine in {scan.machine for scan in scans}:
        own = [scan for scan in scans if scan.machine == machine]
        nights = store.night_of([scan.first for scan in own], machine)
        found |= {scan.id: night for scan, night in zip(own, nights, strict=True)}
    return [found[scan.id] for scan in scans]


def trend_of(scan: Scan, *, unicode: bool) -> str:
    """Return the main observable along the longest axis, as a row of bars."""
    from nightfold.scans.trend import HEIGHTS, trend

    if not scan.axes or scan.main_observable is None:
        return ""
    longest = max(scan.axes, key=lambda axis: axis.points).parameter
    table = scan.table()
    if scan.main_observable not in table or longest not in table:
        return ""
    bars = trend(table[longest].tolist(), table[scan.main_observable].tolist(), _TREND)
    return bars if unicode else bars.translate(str.maketrans(HEIGHTS, PLAIN_HEIGHTS))


def _axes(scan: Scan, *, narrow: bool) -> list[str]:
    """Return the lines that describe the axes: name and range on two lines, or on one if there are several."""
    if not scan.axes:
        return ["(nothing moved)"]
    if narrow or len(scan.axes) == 1:
        return [line for axis in scan.axes for line in (axis.parameter, _marked(scan, axis, span(axis)))]
    return [_marked(scan, axis, axis_line(axis)) for axis in scan.axes]


def _marked(scan: Scan, axis: Axis, text: str) -> str:
    """Return what is said of an axis with a mark if its points were taken in order."""
    return f"{text} {order_mark(scan, axis)}".rstrip()


def _stream(scan: Scan) -> str:
    """Return machine and sequence."""
    return f"{scan.machine}: {scan.sequence}"


def _tabulate(
    screen: Screen, scans: Sequence[Scan], named: Mapping[int, str], times: LocalTimes, empty: str
) -> None:
    """Write one line a scan, for programs."""
    names = (
        *("id", "scan", "machine", "sequence", "axes", "points", "repeats", "shots", "set_aside"),
        *("status", "first", "last", "order"),
    )
    rows = [
        [
            str(scan.id),
            named[scan.id],
            scan.machine,
            scan.sequence,
            "; ".join(axis_line(axis) for axis in scan.axes),
            grid(scan),
            repeats_text(scan),
            str(scan.shots),
            str(scan.set_aside),
            status(scan),
            times.stamp(scan.first, scan.machine),
            times.stamp(scan.last, scan.machine),
            "; ".join(f"{axis} {order}" for axis, order in scan.order.items()),
        ]
        for scan in scans
    ]
    screen.table([Column(name) for name in names], rows, empty=empty)
