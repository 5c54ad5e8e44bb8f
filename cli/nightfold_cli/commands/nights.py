"""``nightfold nights``: a line a night."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Mapping
from typing import Any

from nightfold_cli.arguments import add_last, say_earlier, the_last
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import offset_if_it_changes
from nightfold_cli.notetext import first_words, texts_by_subject
from nightfold_cli.opening import local_times, opened, records
from nightfold_cli.render import Screen

HELP = "list the nights, a line each"
EXAMPLES = ("nightfold nights", "nightfold nights --last 7")
_ON_SCREEN = 40


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("--machine", metavar="NAME", help="of this machine only")
    add_last(parser, _ON_SCREEN)


def run(args: Namespace) -> int:
    """List the nights, the oldest first."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        nights = records(store.nights())
        times = local_times(store)
        noted = texts_by_subject(store)
    if args.machine:
        nights = [night for night in nights if night["machine"] == args.machine]
    listed = the_last(args, screen, nights)
    if screen.json:
        screen.answer({"nights": [_entry(night, _notes(noted, night)) for night in listed]})
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
        *([] if screen.terminal else [Column("notes")]),
    ]
    rows = []
    for night in listed:
        first, last = (times.local(night[key], night["machine"]) for key in ("first", "last"))
        rows.append(
            [
                Cell(f"{night['night']:%a %Y-%m-%d}", f"{night['night']}"),
                night["machine"],
                Cell(f"{first:%H:%M}{offset_if_it_changes(first)}", first.isoformat(timespec="seconds")),
                Cell(f"{last:%H:%M}{offset_if_it_changes(last)}", last.isoformat(timespec="seconds")),
                *(str(night[key]) for key in ("shots", "set_aside", "references", "scans")),
                _sequences(night, _notes(noted, night)),
                *([] if screen.terminal else ["; ".join(_notes(noted, night))]),
            ]
        )
    screen.table(columns, rows, empty="no shots yet; 'nightfold take FILE…' takes some in")
    if rows:
        screen.note(times.note(night["machine"] for night in listed))
    say_earlier(screen, nights, listed)
    return 0


def _notes(noted: Mapping[str, list[str]], night: dict[str, Any]) -> list[str]:
    """Return what was noted about a night."""
    return noted.get(f"night {night['machine']} {night['night']}", [])


def _sequences(night: dict[str, Any], notes: list[str]) -> str | Cell:
    """Return the sequences of a night, on a screen with the first words of its notes below."""
    named = str(night["sequences"])
    return Cell.of((named, f"note: {first_words(notes)}"), named) if notes else named


def _entry(night: dict[str, Any], notes: list[str]) -> dict[str, Any]:
    """Return one night for JSON."""
    sequences = [name for name in night["sequences"].split(", ") if name]
    return {**night, "sequences": sequences, "notes": notes}
