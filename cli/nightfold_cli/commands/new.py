"""``nightfold new``: make a store."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path
from typing import TYPE_CHECKING

from nightfold_cli.failures import UsageError
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted

if TYPE_CHECKING:
    from nightfold.card import MachineCard

HELP = "make a store, and a machine card if asked"
EXAMPLES = (
    "nightfold new",
    "nightfold new --machine heron --zone Europe/Vienna   writes heron.toml to fill in",
    "nightfold new --card heron.toml",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--card", metavar="FILE", type=Path, help="use this machine card")
    parser.add_argument(
        "--machine", metavar="NAME", help="write a starter card NAME.toml (or to --card FILE)"
    )
    parser.add_argument("--zone", metavar="ZONE", default="UTC", help="IANA time zone of the starter card")


def run(args: Namespace) -> int:
    """Make the store, then write and use the card; a card that is wrong leaves no store behind."""
    from nightfold.card import read_card
    from nightfold.opening import create_store

    screen = Screen.here(args.json)
    path: Path | None = args.card or (Path(f"{args.machine}.toml") if args.machine else None)
    starter = _starter(path, args.machine, args.zone) if args.machine and path else None
    if path and starter is None:
        read_card(path)
    with create_store(args.store) as store:
        screen.store(store.where)
        if path and starter is not None:
            with path.open("x", encoding="utf-8") as file:
                file.write(starter)
        card = store.use_card(path) if path else None
        where = store.where
    if screen.json:
        screen.answer({"store": where, "machine": card.machine if card else None, "card": _name(path)})
        return 0
    screen.text(f"A new store: {where}")
    _advise(screen, path, card, written=starter is not None)
    return 0


def _starter(path: Path, machine: str, zone: str) -> str:
    """Return the text of a card to begin with, which will not be written over a file."""
    from nightfold.card import parse_card, starter_card

    if path.exists():
        raise UsageError(f"{path} is there already; use it with --card {path} and without --machine")
    text = starter_card(machine, zone)
    parse_card(text, source=f"the card for {machine!r}")
    return text


def _advise(screen: Screen, path: Path | None, card: MachineCard | None, *, written: bool) -> None:
    """Say what to do next."""
    if written:
        screen.text(
            f"A card to fill in: {path}. When it says what you want, 'nightfold take --card {path} …'."
        )
    elif card:
        counts = [counted(len(card.parameters), "parameter"), counted(len(card.observables), "observable")]
        if card.derived:
            counts.append(f"{len(card.derived)} derived")
        screen.text(f"Machine {card.machine}: {', '.join(counts)}.")
    screen.note("Next: nightfold take FILE…")


def _name(path: Path | None) -> str | None:
    """Return the path as text."""
    return str(path) if path else None
