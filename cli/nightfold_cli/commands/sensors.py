"""``nightfold sensors``: list the sensors, or chart one over time."""

from __future__ import annotations

import math
from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold.concise import short
from nightfold_cli.dateticks import date_ticks
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import LocalTimes, compact
from nightfold_cli.opening import local_times, moment, opened, records
from nightfold_cli.plots import Chart, Label, Points
from nightfold_cli.render import Screen
from nightfold_cli.settings import ENOUGH, setting

if TYPE_CHECKING:
    from nightfold.card import NamedQuantity
    from nightfold.store import Store

HELP = "list the sensors, or chart one over time"
EXAMPLES = (
    "nightfold sensors",
    "nightfold sensors room_temperature --since 2026-10-01",
    "nightfold sensors pressure --json",
)
_WIDEST = 120
_HEIGHT = 18
_LABELS = 11  # what the chart's y axis takes of the width
_BINS = 100
_AROUND_S = 1800.0  # shown before and after a single bin


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("name", metavar="NAME", nargs="?", help="chart this sensor")
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("--since", metavar="TIME", help="from this day or time on (local to the machine)")
    parser.add_argument("--until", metavar="TIME", help="before this day or time")


def run(args: Namespace) -> int:
    """List the sensors with their newest values, or show one over time."""
    from nightfold_cli.failures import UsageError

    screen = Screen.here(args.json)
    if not args.name and (args.since or args.until):
        raise UsageError("--since and --until are for one sensor; name it")
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        if args.name:
            _show(screen, store, args)
        else:
            _list(screen, store, args)
    return 0


def _list(screen: Screen, store: Store, args: Namespace) -> None:
    """List the sensors, a line each."""
    sensors = records(store.sensors(args.machine))
    for sensor in sensors:
        entry = _entry(store, sensor["machine"], sensor["name"])
        sensor["range"] = None if entry is None or entry.low is None else [entry.low, entry.high]
        sensor["in_range"] = (
            None if sensor["range"] is None or entry is None else entry.plausible(sensor["newest"])
        )
    if screen.json:
        screen.answer({"sensors": sensors})
        return
    times = local_times(store)
    ends = {
        key: compact(times.local(sensor[key], sensor["machine"]) for sensor in sensors)
        for key in ("first", "last")
    }
    columns = [
        *([Column("machine")] if len(store.machines()) > 1 else []),
        Column("sensor", wraps=True),
        Column("unit", spare=1),
        Column("readings", right=True, spare=2),
        Column("first", spare=3),
        Column("last"),
        Column("newest", right=True),
        Column("range", wraps=True),
    ]
    rows = [
        [
            *([sensor["machine"]] if len(store.machines()) > 1 else []),
            sensor["name"],
            sensor["unit"] or "",
            str(sensor["readings"]),
            *(Cell(ends[key][k], times.stamp(sensor[key], sensor["machine"])) for key in ("first", "last")),
            Cell(setting(sensor["newest"], digits=ENOUGH), setting(sensor["newest"])),
            _range_text(sensor),
        ]
        for k, sensor in enumerate(sensors)
    ]
    screen.table(columns, rows, empty="no sensors yet; 'nightfold take --sensors FILE…' takes readings in")
    if rows:
        screen.note(times.note(sensor["machine"] for sensor in sensors))


def _entry(store: Store, machine: str, name: str) -> NamedQuantity | None:
    """Return what the machine's card says of a sensor."""
    card = store.cards().get(machine)
    return card.sensors.get(name) if card is not None else None


def _range_text(sensor: dict[str, Any]) -> str:
    """Return whether the newest value is plausible, empty where the card does not say what is."""
    if sensor["range"] is None:
        return ""
    low, high = sensor["range"]
    if sensor["in_range"]:
        return "in range"
    if math.isnan(sensor["newest"]):
        return "! no number"
    return f"! below {short(low)}" if sensor["newest"] < low else f"! above {short(high)}"


def _show(screen: Screen, store: Store, args: Namespace) -> None:
    """Show one sensor over time, in bins."""
    since, until = (moment(text, store, args.machine) for text in (args.since, args.until))
    width = min(screen.width, _WIDEST) - 1
    bins = width - _LABELS if screen.terminal else _BINS
    table = store.sensor_bins(args.name, since, until, machine=args.machine, bins=bins)
    rows = records(table)
    machine, unit = str(table.attrs["machine"]), str(table.attrs["units"]["mean"])
    entry = _entry(store, machine, args.name)
    if screen.json:
        screen.answer(
            {
                "sensor": args.name,
                "machine": machine,
                "unit": unit or None,
                "range": None if entry is None or entry.low is None else [entry.low, entry.high],
                "width_s": table.attrs["width_s"],
                "bins": rows,
            }
        )
        return
    times = local_times(store)
    if not screen.terminal:
        _columns(screen, rows, times, machine)
        return
    detail = entry.description if entry is not None else ""
    screen.heading(args.name, detail)
    if not rows:
        screen.text("no readings in that time; without options all are shown")
        return
    screen.chart(_chart(screen, rows, times, machine, Label(args.name, unit), width, table.attrs["width_s"]))
    marks = ("●", "│") if screen.unicode else ("o", "|")
    screen.note(
        f"{marks[0]} mean, {marks[1]} from lowest to highest, of {_lasting(table.attrs['width_s'])} each"
    )
    screen.gap()
    screen.fields(_figures(rows, times, machine, unit, entry))


def _columns(screen: Screen, rows: list[dict[str, Any]], times: LocalTimes, machine: str) -> None:
    """Write the bins as lines of cells."""
    names = ("readings", "low", "mean", "high")
    screen.table(
        [Column("at"), *(Column(name, right=True) for name in names)],
        [[times.stamp(row["at"], machine), *(setting(row[name]) for name in names)] for row in rows],
        empty="no readings in that time",
    )


def _chart(
    screen: Screen,
    rows: list[dict[str, Any]],
    times: LocalTimes,
    machine: str,
    y: Label,
    width: int,
    bin_s: float,
) -> Any:
    """Return the chart: a mark at the mean of each bin, a bar from its lowest to its highest reading."""
    points = Points(
        [row["at"].timestamp() + bin_s / 2 for row in rows],
        [row["mean"] for row in rows],
        low=[row["low"] for row in rows],
        high=[row["high"] for row in rows],
    )
    zone = times.zone(machine)
    chart = Chart(
        points,
        Label("time", str(zone)),
        y,
        width=width,
        height=_HEIGHT,
        unicode=screen.unicode,
        ticks=date_ticks(zone),
        around=max(bin_s, _AROUND_S),
    )
    return chart.lines()


def _figures(
    rows: list[dict[str, Any]], times: LocalTimes, machine: str, unit: str, entry: NamedQuantity | None
) -> list[tuple[str, str]]:
    """Return what the span comes to, in words."""
    known = [row for row in rows if math.isfinite(row["mean"])]
    count = sum(row["readings"] for row in rows)
    figures = [("readings", str(count))]
    if known:
        lowest, highest = min(known, key=lambda row: row["low"]), max(known, key=lambda row: row["high"])
        total = sum(row["readings"] for row in known)
        mean = math.fsum(row["mean"] * (row["readings"] / total) for row in known)
        for name, row, key in (("lowest", lowest, "low"), ("highest", highest, "high")):
            at = times.full(row["at"], machine)
            figures.append((name, f"{setting(row[key], unit, ENOUGH)}, in the bin from {at}"))
        figures.insert(2, ("mean", setting(mean, unit, ENOUGH)))
    if entry is not None and entry.low is not None and entry.high is not None:
        outside = [row for row in known if row["low"] < entry.low or row["high"] > entry.high]
        text = f"{short(entry.low)} to {short(entry.high)} {unit}".rstrip()
        figures.append(("range", f"{text}; {len(outside)} of {len(known)} bins reach outside"))
    return figures


def _lasting(seconds: float) -> str:
    """Return a width of bins in words."""
    for size, name in ((86400.0, "d"), (3600.0, "h"), (60.0, "min"), (1.0, "s")):
        if seconds >= size and (seconds / size == round(seconds / size) or size == 1.0):
            return f"{seconds / size:g} {name}"
    return f"{seconds * 1e3:g} ms"
