"""``nightfold nights``: a line a night."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import Any

from nightfold_cli.arguments import positive
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import offset_if_it_changes
from nightfold_cli.opening import local_times, opened, records
from nightfold_cli.render import Screen

HELP = "list the nights, a line each"
EXAMPLES = ("nightfold nights", "nightfold nights --last 7")
_ON_SCREEN = 40


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("--last", metavar="N", type=positive, help=f"the last N (on a terminal {_ON_SCREEN})")
    parser.add_argument("--all", action="store_true", help="all of them, on a terminal too")


def run(args: Namespace) -> int:
    """List the nights, the oldest first."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        check_machine(store, args.machine)
        nights = records(store.nights())
        times = local_times(store)
    if args.machine:
        nights = [night for night in nights if night["machine"] == args.machine]
    last = args.last or (_ON_SCREEN if screen.terminal and not args.all else len(nights))
    earlier = len(nights) - last
    nights = nights[-last:] if last else []
    if screen.json:
        screen.answer({"nights": [_entry(night) for night in nights]})
        return 0
    columns = [
        Column("night"),
        Column("machine", spare=2),
        Column("from"),
        Column("to"),
        Column("shots", right=True),
        Column("set aside", right=True, spare=1),
        Column("references", right=True, spare=3),
        Column("scans", right=True),
        Column("sequences", wraps=True),
    ]
    rows = []
    for night in nights:
        first, last = (times.local(night[key], night["machine"]) for key in ("first", "last"))
        rows.append(
            [
                Cell(f"{night['night']:%a %Y-%m-%d}", f"{night['night']}"),
                night["machine"],
                Cell(f"{first:%H:%M}{offset_if_it_changes(first)}", first.isoformat(timespec="seconds")),
                Cell(f"{last:%H:%M}{offset_if_it_changes(last)}", last.isoformat(timespec="seconds")),
                *(str(night[key]) for key in ("shots", "set_aside", "references", "scans")),
                night["sequences"],
            ]
        )
    screen.table(columns, rows, empty="no shots yet; 'nightfold take FILE…' takes some in")
    if rows:
        screen.note(times.note(night["machine"] for night in nights))
    if earlier > 0:
        screen.note(f"{earlier} earlier ones not shown; --all shows them")
    return 0


def _entry(night: dict[str, Any]) -> dict[str, Any]:
    """Return one night for JSON."""
    return {**night, "sequences": [name for name in night["sequences"].split(", ") if name]}
