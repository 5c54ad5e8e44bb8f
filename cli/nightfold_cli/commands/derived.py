"""``nightfold derived``: the quantities that machine cards derive of others."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace

from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times, opened, records
from nightfold_cli.render import Screen
from nightfold_cli.settings import setting

HELP = "list the quantities that the card derives of others"
EXAMPLES = ("nightfold derived", "nightfold derived --all")
_NONE = "no derived quantities; [derived.NAME] in the machine card makes one"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    parser.add_argument("--all", action="store_true", help="earlier expressions too")


def run(args: Namespace) -> int:
    """List the derived quantities with their expressions."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        machine = check_machine(store, args.machine, screen)
        rows = records(store.derived(machine, versions=args.all))
        times = local_times(store)
        several = len(store.machines()) > 1
    if screen.json:
        screen.answer({"derived": [{**row, "unit": row["unit"] or None} for row in rows]})
        return 0
    moments = [times.local(row["since"], row["machine"]) for row in rows]
    columns = [
        *([Column("machine")] if several else []),
        Column("derived", plain_name="name"),
        Column("expression", wraps=True, least=30),
        Column("unit"),
        Column("kind", plain_name="of", spare=2),
        Column("version", right=True),
        Column(heading(moments, "since"), plain_name="since", spare=1),
        *([Column("in force")] if args.all else []),
    ]
    lines = [
        [
            *([row["machine"]] if several else []),
            row["name"],
            setting(row["expression"]),
            row["unit"],
            row["of"] or "-",
            row["version"],
            Cell(when, at.isoformat(timespec="seconds")),
            *(["yes" if row["in_force"] else "no"] if args.all else []),
        ]
        for row, when, at in zip(rows, compact(moments), moments, strict=True)
    ]
    screen.table(columns, lines, empty=_NONE)
    if rows:
        screen.note(times.note(row["machine"] for row in rows))
    return 0
