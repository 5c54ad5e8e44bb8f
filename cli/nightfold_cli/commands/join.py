"""``nightfold join KEY KEY…``: make one scan of several, or take that back."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace

from nightfold_cli.arguments import by_whom
from nightfold_cli.arrangedtext import add_shared, answer_shared, entry, what_was_done
from nightfold_cli.failures import UsageError
from nightfold_cli.naming import name_in, named_scan, shared_names
from nightfold_cli.notetext import texts_by_subject
from nightfold_cli.opening import opened
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.scantext import entry as scan_entry

HELP = "make one scan of several, or take that back"
EXAMPLES = (
    'nightfold join loss-coarse#1 loss-coarse#2 --reason "broken off at midnight"',
    "nightfold join 41 44",
    "nightfold join --undo 3",
    "nightfold join --list",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "keys", metavar="KEY", nargs="*", help="id, label (its newest round) or label#round of a scan"
    )
    add_shared(parser)


def run(args: Namespace) -> int:
    """Join the scans."""
    screen = Screen.here(args.json)
    if answer_shared(args, screen, args.keys):
        return 0
    if len(args.keys) < 2:
        raise UsageError(f"found {counted(len(args.keys), 'scan')}, wanted two or more to make one of")
    with opened(args, screen) as store:
        ids = [named_scan(store, key, screen).id for key in args.keys]
        scan = store.join_scans(ids, reason=args.reason, by=by_whom(args))
        done, name, names = scan.arrangements[-1], name_in(store, scan), shared_names(store)
        if screen.json:
            screen.answer(
                {"arrangement": entry(done, names), "scan": scan_entry(scan, name, texts_by_subject(store))}
            )
            return 0
    screen.text(f"{what_was_done(done, names)}, now {counted(scan.shots, 'shot')}")
    screen.note(f"'nightfold join --undo {done.number}' takes it back; next: nightfold scan {name}")
    return 0
