"""``nightfold split KEY --at WHERE``: part a scan in two, or take that back."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace

from nightfold_cli.arguments import by_whom, positive
from nightfold_cli.arrangedtext import add_shared, answer_shared, entry, what_was_done
from nightfold_cli.failures import UsageError
from nightfold_cli.naming import name_in, named_scan, shared_names
from nightfold_cli.notetext import texts_by_subject
from nightfold_cli.opening import opened
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.scantext import entry as scan_entry

HELP = "part a scan in two, or take that back"
EXAMPLES = (
    'nightfold split loss-coarse#2 --at 2026-10-05T23:40 --reason "laser relocked"',
    "nightfold split 41 --at 5f3a9c0e",
    "nightfold split 41 --after 31",
    "nightfold split --undo 3",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("key", metavar="KEY", nargs="?", help="id, label (its newest round) or label#round")
    where = parser.add_mutually_exclusive_group()
    where.add_argument(
        "--at", metavar="WHERE", help="where the second part begins: uid of its first shot, or a local time"
    )
    where.add_argument(
        "--after", metavar="N", type=positive, help="after so many shots, those set aside counted too"
    )
    add_shared(parser)


def run(args: Namespace) -> int:
    """Split the scan."""
    screen = Screen.here(args.json)
    if answer_shared(args, screen, [args.key] if args.key else []):
        return 0
    at = args.at if args.after is None else args.after
    if args.key is None or at is None:
        raise UsageError("wanted a scan and a place in it: --at SHOT, --at TIME or --after N")
    with opened(args, screen) as store:
        scan_id = named_scan(store, args.key, screen).id
        parts = store.split_scan(scan_id, at=at, reason=args.reason, by=by_whom(args))
        done, names = parts[0].arrangements[-1], shared_names(store)
        named = [name_in(store, part) for part in parts]
        if screen.json:
            notes = texts_by_subject(store)
            scans = [scan_entry(part, name, notes) for part, name in zip(parts, named, strict=True)]
            screen.answer({"arrangement": entry(done, names), "scans": scans})
            return 0
    sizes = " and ".join(counted(part.shots, "shot") for part in parts)
    screen.text(f"{what_was_done(done, names)}, with {sizes}")
    screen.note(f"'nightfold split --undo {done.number}' takes it back; next: nightfold scan {named[1]}")
    return 0
