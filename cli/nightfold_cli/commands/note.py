"""``nightfold note TEXT``: write something down about tonight, or about a shot, a scan, a fit."""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import add_by, add_subject, by_whom
from nightfold_cli.failures import UsageError
from nightfold_cli.known import check_machine
from nightfold_cli.naming import named_scan
from nightfold_cli.notetext import about, entry
from nightfold_cli.opening import local_times, opened
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.store import Store

HELP = "write a note on tonight, a shot, a scan or a fit"
EXAMPLES = (
    'nightfold note "laser unlocked twice"',
    'nightfold note "atoms gone for ten minutes" --last shot',
    'nightfold note "this one for the paper" --scan loss-coarse',
    "nightfold note - < what-happened.txt",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.usage = f"{parser.prog} TEXT [TEXT ...] [option ...]"
    parser.add_argument("text", metavar="TEXT", nargs="+", help="what to write down; - reads it from stdin")
    what = add_subject(parser)
    what.add_argument("--last", choices=("shot", "scan", "fit"), help="on the newest of these")
    parser.add_argument("--machine", metavar="NAME", help="of this machine, where there are several")
    add_by(parser)


def run(args: Namespace) -> int:
    """Write the note, by default on tonight."""
    screen = Screen.here(args.json)
    text = _typed(args.text)
    if not text.strip():
        raise UsageError("note: found no text, wanted what to write down")
    if "\0" in text:
        raise UsageError("note: wanted text without NUL")
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        note = store.add_note(text, **_subject(store, args, screen), by=by_whom(args))
        times = local_times(store)
    if screen.json:
        screen.answer({"note": entry(note)})
        return 0
    screen.text(f"noted on {about(note)}, {times.full(note.at, note.machine)}")
    return 0


def _typed(words: list[str]) -> str:
    """Return what is to be noted.

    Raises
    ------
    UsageError
        If it is not UTF-8.
    """
    try:
        text = sys.stdin.read() if words == ["-"] else " ".join(words)
        text.encode()  # signs of an argument that are no UTF-8 stand in it as halves of surrogate pairs
    except UnicodeError:
        raise UsageError(
            "note: found bytes that are not UTF-8, wanted text; convert it first, or type it anew"
        ) from None
    return text


def _subject(store: Store, args: Namespace, screen: Screen) -> dict[str, Any]:
    """Return what the note is about, as `Store.add_note` takes it."""
    if args.shot:
        return {"shot": args.shot}
    if args.scan:
        return {"scan": named_scan(store, args.scan, screen).id}
    if args.fit:
        return {"fit": args.fit}
    if args.last:
        return {args.last: _newest(store, args.last, args.machine)}
    night = args.night or store.night_of([datetime.now(UTC)], args.machine)[0]
    return {"night": night, "machine": args.machine}


def _newest(store: Store, kind: str, machine: str | None) -> Any:
    """Return the newest shot, scan or fit there is.

    Raises
    ------
    UsageError
        If there is none yet.
    """
    found: list[Any] = []
    if kind == "shot":
        found = store.shots(machine=machine, limit=1, set_aside=True)["uid"].tolist()
    elif kind == "scan":
        scans = [scan for scan in store.scans() if machine in (None, scan.machine)]
        found = [max(scans, key=lambda scan: (scan.last, scan.id)).id] if scans else []
    else:
        found = [max(fit.id for fit in fits)] if (fits := store.fits()) else []
    if not found:
        raise UsageError(f"--last {kind}: there is none yet")
    return found[-1]
