"""``nightfold shots``: list shots, or show one in full."""

from __future__ import annotations

import math
import re
from argparse import ArgumentParser, Namespace
from collections.abc import Collection
from typing import TYPE_CHECKING, Any

from nightfold.concise import concise
from nightfold_cli.arguments import positive
from nightfold_cli.failures import UsageError
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.naming import named_scan, shared_names
from nightfold_cli.notetext import note_fields
from nightfold_cli.opening import local_times, moment, opened, records
from nightfold_cli.render import Screen
from nightfold_cli.settings import ENOUGH, aligned, setting

if TYPE_CHECKING:
    from nightfold.ledger.shot import ShotReading, ShotView
    from nightfold.store import Store

HELP = "list shots, or show one in full"
EXAMPLES = (
    "nightfold shots -p coil_current -o atom_number --since 2026-10-05",
    "nightfold shots --scan loss-coarse -o atom_number --set-aside",
    "nightfold shots -o atom_number --sensor room_temperature --align mean",
    "nightfold shots 5f3a9c0e",
)
_ON_SCREEN = 40
_DIGEST = re.compile("[0-9a-f]{32}")
_DIGITS = 12
_NONE = "no shots like that; without options all are listed"
_NONE_YET = "no shots yet; 'nightfold take FILE…' takes some in"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("uid", metavar="UID", nargs="?", help="show this shot in full")
    parser.add_argument(
        "-p", "--parameter", metavar="NAME", action="append", default=[], help="with this setting"
    )
    parser.add_argument(
        "-o", "--observable", metavar="NAME", action="append", default=[], help="with this reading"
    )
    parser.add_argument(
        "--sensor", metavar="NAME", action="append", default=[], help="with what this sensor showed"
    )
    parser.add_argument(
        "--align",
        choices=("nearest", "mean"),
        help="the reading nearest to the start of the shot (the default), or the mean over the shot",
    )
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("--sequence", metavar="NAME", help="of this sequence only")
    parser.add_argument("--scan", metavar="KEY", help="of this scan only")
    parser.add_argument("--since", metavar="TIME", help="from this day or time on (local to the machine)")
    parser.add_argument("--until", metavar="TIME", help="before this day or time")
    parser.add_argument(
        "--limit", metavar="N", type=positive, help=f"the last N (on a terminal {_ON_SCREEN})"
    )
    parser.add_argument("--set-aside", action="store_true", help="with the shots that are set aside")


def run(args: Namespace) -> int:
    """List shots, the newest last, or show the one that was named."""
    screen = Screen.here(args.json)
    if args.align and not args.sensor:
        raise UsageError("--align says how sensors are read; name one with --sensor")
    if args.uid and _filters(args):
        raise UsageError(f"a shot is shown in full; {_filters(args)[0]} is for lists")
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        times = local_times(store)
        if args.uid:
            shot = store.shot(args.uid)
            _show(screen, shot, times, records(store.notes(shot=shot.uid)))
        else:
            _list(screen, store, args, times)
    return 0


def _filters(args: Namespace) -> list[str]:
    """Return the options that were given which narrow a list."""
    names = (
        "parameter",
        "observable",
        "sensor",
        "align",
        "machine",
        "sequence",
        "scan",
        "since",
        "until",
        "limit",
        "set_aside",
    )
    return [f"--{name.replace('_', '-')}" for name in names if getattr(args, name)]


def _list(screen: Screen, store: Store, args: Namespace, times: LocalTimes) -> None:
    """List shots."""
    limit = args.limit or (_ON_SCREEN + 1 if screen.terminal else None)
    scan = None if args.scan is None else named_scan(store, args.scan, screen)
    chosen: dict[str, Any] = {
        "sequence": args.sequence,
        "scan": scan.id if scan else None,
        "since": moment(args.since, store, args.machine),
        "until": moment(args.until, store, args.machine),
        "set_aside": args.set_aside,
        "limit": limit,
    }
    table = store.shots(
        args.parameter,
        [*args.observable, *(f"{name}_stderr" for name in args.observable if screen.terminal)],
        machine=args.machine,
        sensors=args.sensor,
        align=args.align or "nearest",
        **chosen,
    )
    rows = _with_machines(store, records(table), args.machine, chosen)
    if screen.json:
        screen.answer({"shots": rows, "units": dict(table.attrs["units"])})
        return
    wanted = (*args.parameter, *args.observable, *args.sensor)
    cut = not args.limit and screen.terminal and len(rows) > _ON_SCREEN
    asked = {name: table.attrs["units"].get(name, "") for name in wanted}
    several = args.machine is None and len(store.machines()) > 1
    _draw(
        screen,
        rows[-_ON_SCREEN:] if cut else rows,
        asked,
        several,
        times,
        _NONE if store.machines() else _NONE_YET,
    )
    if cut:
        screen.note(f"the last {_ON_SCREEN} shots; --limit N shows more")


def _with_machines(
    store: Store, rows: list[dict[str, Any]], machine: str | None, chosen: dict[str, Any]
) -> list[dict[str, Any]]:
    """Return the rows with the machine of each shot, behind its time."""
    machines = [machine] if machine else store.machines()
    of_shot: dict[str, str] = {}
    if len(machines) > 1:
        for name in machines:
            of_shot.update(dict.fromkeys(store.shots(machine=name, **chosen)["uid"], name))
    only = machines[0] if len(machines) == 1 else None
    names = shared_names(store) if any("#" in str(row["scan"]) for row in rows) else {}
    return [
        {
            "uid": row["uid"],
            "started": row["started"],
            "machine": machine,
            "sequence": row["sequence"],
            "scan": names.get((machine, row["sequence"], row["scan"]), row["scan"]),
            **{
                name: value
                for name, value in row.items()
                if name not in ("uid", "started", "sequence", "scan")
            },
        }
        for row in rows
        for machine in [only or of_shot.get(str(row["uid"]))]
    ]


def _draw(
    screen: Screen,
    rows: list[dict[str, Any]],
    asked: dict[str, str],
    several: bool,
    times: LocalTimes,
    empty: str,
) -> None:
    """Draw a line a shot."""
    moments = [times.local(row["started"], row["machine"]) for row in rows]
    columns = [
        Column("shot", plain_name="uid"),
        Column(heading(moments, "started"), plain_name="started"),
        *([Column("machine", spare=3)] if several else []),
        Column("sequence", spare=2),
        Column("scan", spare=1),
        *(
            Column(f"{name} ({unit})" if unit else name, right=True, plain_name=name)
            for name, unit in asked.items()
        ),
    ]
    cells = {name: _cells(rows, name) for name in asked}
    lines: list[Row] = [
        [
            Cell(_short(str(row["uid"])), str(row["uid"])),
            Cell(when, at.isoformat(timespec="milliseconds")),
            *([setting(row["machine"])] if several else []),
            setting(row["sequence"]),
            row["scan"] if isinstance(row["scan"], str) else "-",
            *(cells[name][place] for name in asked),
        ]
        for place, (row, when, at) in enumerate(
            zip(rows, compact(moments, seconds=True), moments, strict=True)
        )
    ]
    screen.table(columns, lines, empty=empty)
    if lines:
        screen.note(times.note(row["machine"] for row in rows))


def _short(uid: str) -> str:
    """Return what is shown of a uid: the beginning of a derived one, which is a digest; others in full."""
    return uid[:_DIGITS] if _DIGEST.fullmatch(uid) else uid


def _cells(rows: list[dict[str, Any]], name: str) -> list[Cell]:
    """Return a column of settings or readings; readings with their stderr in concise notation, on a screen."""
    values = [row[name] if name in row else row.get(f"{name}_") for row in rows]
    if not any(f"{name}_stderr" in row for row in rows):
        return aligned(values)
    return [_reading_cell(value, row.get(f"{name}_stderr")) for value, row in zip(values, rows, strict=True)]


def _reading_cell(value: Any, stderr: Any) -> Cell:
    """Return a reading with its stderr; without one six digits of it."""
    if isinstance(stderr, float) and stderr > 0 and isinstance(value, float):
        return Cell(concise(value, stderr), setting(value))
    return Cell(setting(value, digits=ENOUGH), setting(value))


def _show(screen: Screen, shot: ShotView, times: LocalTimes, notes: list[dict[str, Any]]) -> None:
    """Show all that is known of one shot."""
    if screen.json:
        screen.answer({"shot": _entry(shot)})
        return
    screen.heading(shot.uid)
    screen.fields(
        (name, value)
        for name, value in (
            ("started", times.full(shot.started, shot.machine)),
            ("machine", shot.machine),
            ("sequence", shot.sequence),
            ("scan", shot.scan or "none"),
            ("reference", "yes" if shot.reference else ""),
            ("set aside", shot.set_aside or "no"),
            *note_fields([_signed(note, times) for note in notes], screen),
            ("taken from", f"{shot.source}:{shot.line}" if shot.source else ""),
            *((f"frame {camera}", f"{role}: {path}") for camera, role, path in shot.frames),
        )
        if value
    )
    screen.part()
    screen.table(
        [Column("observable"), Column("value", right=True), Column("unit"), *_mark(shot.reread)],
        [
            [name, _reading(reading), reading.unit, *_marked(name, shot.reread, "read again")]
            for name, reading in shot.observables.items()
            if reading.derived is None
        ],
        empty="no observables yet",
    )
    screen.part()
    screen.table(
        [
            Column("parameter"),
            Column("value", right=True, wraps=True),
            Column("unit"),
            Column("swept"),
            *_mark(shot.corrected),
        ],
        [
            [
                name,
                setting(part.value),
                part.unit,
                "swept" if part.swept else "",
                *_marked(name, shot.corrected, "corrected"),
            ]
            for name, part in shot.parameters.items()
            if part.derived is None
        ],
        empty="no parameters",
    )
    _show_derived(screen, shot)
    if shot.reread or shot.corrected:
        screen.note(f"since it was taken something changed; 'nightfold amend {shot.uid}' tells its history")


def _show_derived(screen: Screen, shot: ShotView) -> None:
    """Show what the card derives of the readings and settings of a shot, if anything."""
    rows: list[Row] = [
        [name, _reading(reading), reading.unit, reading.derived, ""]
        for name, reading in shot.observables.items()
        if reading.derived is not None
    ]
    rows += [
        [name, setting(part.value, digits=ENOUGH), part.unit, part.derived, "swept" if part.swept else ""]
        for name, part in shot.parameters.items()
        if part.derived is not None
    ]
    if rows:
        screen.part()
        screen.table(
            [
                Column("derived"),
                Column("value", right=True),
                Column("unit"),
                Column("expression", wraps=True, least=30),
                Column("swept"),
            ],
            rows,
            empty="",
        )


def _mark(names: Collection[str]) -> list[Column]:
    """Return the column that marks what changed since the shot was taken, where anything did."""
    return [Column("changed")] if names else []


def _marked(name: str, names: Collection[str], mark: str) -> list[str]:
    """Return the cell of that column."""
    return [mark if name in names else ""] if names else []


def _signed(note: dict[str, Any], times: LocalTimes) -> str:
    """Return the text of a note, with who wrote it and when if that is not the record itself."""
    if not note["by"]:
        return str(note["text"])
    return f"{note['text']} ({note['by']}, {times.local(note['at'], note['machine']):%Y-%m-%d %H:%M})"


def _reading(reading: ShotReading) -> str | Cell:
    """Return a reading with its uncertainty, or the word for having none."""
    if math.isnan(reading.value):
        return reading.state or "nan"
    if reading.stderr:
        return concise(reading.value, reading.stderr)
    return Cell(setting(reading.value, digits=ENOUGH), setting(reading.value))


def _entry(shot: ShotView) -> dict[str, Any]:
    """Return a shot for JSON."""
    return {
        "uid": shot.uid,
        "started": shot.started,
        "machine": shot.machine,
        "sequence": shot.sequence,
        "scan": shot.scan,
        "reference": shot.reference,
        "set_aside": shot.set_aside,
        "notes": shot.notes,
        "source": shot.source,
        "line": shot.line,
        "frames": [{"camera": camera, "role": role, "path": path} for camera, role, path in shot.frames],
        "parameters": {
            name: {
                "value": part.value,
                "unit": part.unit or None,
                "swept": part.swept,
                "derived": part.derived,
                "corrected": name in shot.corrected,
            }
            for name, part in shot.parameters.items()
        },
        "observables": {
            name: {
                "value": reading.value,
                "stderr": reading.stderr,
                "unit": reading.unit or None,
                "state": reading.state,
                "derived": reading.derived,
                "reread": name in shot.reread,
            }
            for name, reading in shot.observables.items()
        },
    }
