"""``nightfold edits``: the settings that people changed."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold_cli.known import check_machine, check_parameter
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times, moment, opened, records
from nightfold_cli.render import Screen
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.store import Store

HELP = "list the settings that people changed"
EXAMPLES = ("nightfold edits --since 2026-10-01", "nightfold edits --json")


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--since", metavar="TIME", help="from this day or time on (local to the machine)")
    parser.add_argument("--until", metavar="TIME", help="before this day or time")
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("-p", "--parameter", metavar="NAME", help="of this parameter only")


def run(args: Namespace) -> int:
    """List the edits, the oldest first."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        check_parameter(store, args.parameter, args.machine)
        edits = _edits(store, args)
        times = local_times(store)
        several = len(store.machines()) > 1
    if args.parameter:
        edits = [edit for edit in edits if edit["parameter"] == args.parameter]
    if screen.json:
        screen.answer({"edits": edits})
        return 0
    moments = [times.local(edit["at"], edit["machine"]) for edit in edits]
    columns = [
        Column(heading(moments), plain_name="at"),
        Column("parameter"),
        Column("old", right=True, wraps=True),
        Column("new", right=True, wraps=True),
        *([Column("machine")] if several else []),
        Column("sequence", wraps=True),
    ]
    rows = [
        [
            Cell(when, at.isoformat(timespec="seconds")),
            edit["parameter"],
            setting(edit["old"], edit["unit"]),
            setting(edit["new"], edit["unit"]),
            *([edit["machine"]] if several else []),
            edit["sequence"],
        ]
        for when, at, edit in zip(compact(moments), moments, edits, strict=True)
    ]
    screen.table(columns, rows, empty="no setting was changed but by a scan")
    if rows:
        screen.note(times.note(edit["machine"] for edit in edits))
    return 0


def _edits(store: Store, args: Namespace) -> list[dict[str, Any]]:
    """Return the edits of one machine or of all, the oldest first, each with its machine and unit."""
    found = []
    for machine in [args.machine] if args.machine else store.machines():
        since, until = (moment(text, store, machine) for text in (args.since, args.until))
        table = store.edits(since, until, machine=machine)
        units = table.attrs["units"]
        found += [
            {**edit, "unit": units.get(edit["parameter"]) or None, "machine": machine}
            for edit in records(table)
        ]
    return sorted(found, key=lambda edit: edit["at"])
