"""``nightfold card``: the machine card in force, or how it came to be."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times, opened
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.ledger.cards import CardUsed

HELP = "show a machine's card, or those it had before"
EXAMPLES = ("nightfold card", "nightfold card > heron.toml", "nightfold card --history")


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "--history", action="store_true", help="when each card came into force, and what it changed"
    )
    parser.add_argument("--machine", metavar="NAME", help="of this machine, where there are several")


def run(args: Namespace) -> int:
    """Show the card as it was given, or a few lines for each that there was."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        machine = check_machine(store, args.machine, screen) or store.machine()
        used = store.cards_used(machine)
        times = local_times(store)
    if not args.history:
        used = [card for card in used if card.in_force]
    if screen.json:
        screen.answer({"machine": machine, "cards": [_entry(card) for card in used]})
        return 0
    if not args.history and used:
        screen.verbatim(used[0].toml)
        return 0
    moments = [times.local(card.at, machine) for card in used]
    columns = [
        Column(heading(moments), plain_name="at"),
        Column("in force"),
        Column("changed lines", wraps=True),
    ]
    rows = [
        [
            Cell(when, at.isoformat(timespec="seconds")),
            "yes" if card.in_force else "",
            Cell.of(card.changes or ("the first",)),
        ]
        for when, at, card in zip(compact(moments), moments, used, strict=True)
    ]
    screen.table(columns, rows, empty=f"{machine} has no card; 'nightfold take --card FILE …' uses one")
    if rows:
        screen.note(times.note([machine]))
    return 0


def _entry(card: CardUsed) -> dict[str, Any]:
    """Return a card for JSON."""
    return {"at": card.at, "in_force": card.in_force, "changes": list(card.changes), "toml": card.toml}
