"""``nightfold set-aside SHOT… --reason TEXT``: leave shots out of results, or put them back."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace

from nightfold_cli.arguments import add_by, by_whom
from nightfold_cli.failures import UsageError
from nightfold_cli.opening import opened
from nightfold_cli.render import Screen

HELP = "leave shots out of results, or put them back"
EXAMPLES = (
    'nightfold set-aside 5f3a9c0e 77b1 --reason "imaging laser off lock"',
    "nightfold set-aside 5f3a9c0e --put-back",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("shots", metavar="SHOT", nargs="+", help="uid of a shot, or its unique beginning")
    what = parser.add_mutually_exclusive_group(required=True)
    what.add_argument("--reason", metavar="TEXT", help="why the shots are left out")
    what.add_argument("--put-back", action="store_true", help="use the shots again")
    add_by(parser)


def run(args: Namespace) -> int:
    """Set the shots aside, or put them back; nothing is deleted."""
    screen = Screen.here(args.json)
    if not args.put_back and not args.reason.strip():
        raise UsageError("--reason: found nothing, wanted why the shots are left out")
    with opened(args, screen) as store:
        uids = [store.shot(shot).uid for shot in args.shots]
        by = by_whom(args)
        changed = store.put_back(uids, by=by) if args.put_back else store.set_aside(uids, args.reason, by=by)
    done = "put back" if args.put_back else "set aside"
    if screen.json:
        screen.answer({"put_back" if args.put_back else "set_aside": changed, "shots": uids})
        return 0
    unchanged = len(uids) - changed
    already = f"; {unchanged} were so already" if unchanged else ""
    screen.text(f"{changed} {'shot' if changed == 1 else 'shots'} {done}{already}")
    return 0
