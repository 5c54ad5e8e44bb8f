"""``nightfold notes WORDS``: find what was written down."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import add_last, add_subject, say_earlier, the_last
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.naming import ambiguous_labels, name_of, named_scan
from nightfold_cli.notetext import entry
from nightfold_cli.opening import local_times, moment, opened, records
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.store import Store

HELP = "find notes by words, subject or time"
EXAMPLES = (
    "nightfold notes",
    "nightfold notes laser unlocked --since 2026-10-05",
    "nightfold notes --scan loss-coarse",
)
_ON_SCREEN = 40
_NONE = "no notes like that; without options all are listed"
_NONE_YET = "no notes yet; 'nightfold note TEXT' writes one"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("words", metavar="WORD", nargs="*", help="all of these occur in it")
    add_subject(parser)
    parser.add_argument("--machine", metavar="NAME", help="about this machine only")
    parser.add_argument("--since", metavar="TIME", help="from this day or time on (local to the machine)")
    parser.add_argument("--until", metavar="TIME", help="before this day or time")
    add_last(parser, _ON_SCREEN)


def run(args: Namespace) -> int:
    """List the notes, the newest last."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        scan = None if args.scan is None else named_scan(store, args.scan, screen).id
        found = records(
            store.notes(
                args.words,
                shot=args.shot,
                scan=scan,
                fit=args.fit,
                night=args.night,
                machine=args.machine,
                since=moment(args.since, store, args.machine),
                until=moment(args.until, store, args.machine),
            )
        )
        _name_scans(store, found)
        times = local_times(store)
        empty = _NONE if found or not store.notes().empty else _NONE_YET
    listed = the_last(args, screen, found)
    if screen.json:
        screen.answer({"notes": [entry(note) for note in listed]})
        return 0
    _draw(screen, listed, times, empty)
    say_earlier(screen, found, listed)
    return 0


def _name_scans(store: Store, notes: list[dict[str, Any]]) -> None:
    """Name scans whose label is shared by their id, as everywhere."""
    if not any(note["kind"] == "scan" for note in notes):
        return
    scans = store.scans()
    ambiguous = ambiguous_labels(scans)
    names = {f"scan {scan.id}": name_of(scan, ambiguous) for scan in scans}
    for note in notes:
        note["about"] = names.get(note["subject"], note["about"])


def _draw(screen: Screen, notes: list[dict[str, Any]], times: LocalTimes, empty: str) -> None:
    """Draw a few lines a note."""
    moments = [times.local(note["at"], note["machine"] or None) for note in notes]
    several = len({note["machine"] for note in notes}) > 1
    columns = [
        Column(heading(moments), plain_name="at"),
        Column("by", spare=1),
        *([Column("machine", spare=2)] if several or not screen.terminal else []),
        *([] if screen.terminal else [Column("kind")]),
        Column("about", wraps=True),
        Column("note", wraps=True, least=24),
    ]
    rows: list[Row] = [
        [
            Cell(when, at.isoformat(timespec="seconds")),
            note["by"] or "-",
            *([note["machine"] or "-"] if several or not screen.terminal else []),
            *([] if screen.terminal else [note["kind"]]),
            Cell(f"{note['kind']} {note['about']}", note["about"]),
            Cell.of(note["text"].split("\n"), note["text"]),
        ]
        for note, at, when in zip(notes, moments, compact(moments), strict=True)
    ]
    screen.table(columns, rows, empty=empty)
    if rows:
        screen.note(times.note(note["machine"] or None for note in notes))
