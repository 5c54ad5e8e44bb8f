"""``nightfold amend UID…``: what happened to a shot since, and corrections of its settings."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING

from nightfold_cli.arguments import add_by, by_whom
from nightfold_cli.correctiontext import show_correction
from nightfold_cli.failures import UsageError
from nightfold_cli.historytext import history_entry, show_history
from nightfold_cli.naming import named_scan
from nightfold_cli.opening import local_times, opened
from nightfold_cli.render import Screen
from nightfold_cli.typed import Typed, typed_setting

if TYPE_CHECKING:
    from nightfold.store import Store

HELP = "tell the history of a shot, or correct its settings"
EXAMPLES = (
    "nightfold amend 5f3a9c0e",
    'nightfold amend 5f3a9c0e --set "coil_current=61.3 A" --because "read off the supply"',
    'nightfold amend --scan loss-coarse --set imaging_axis=y --because "cable swapped"',
    'nightfold amend --scan loss-coarse --set "coil_current*=1.2" --because "120 A range" --dry-run',
    "nightfold amend --undo 7",
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("uids", metavar="UID", nargs="*", help="uid of a shot, or its unique beginning")
    parser.add_argument("--scan", metavar="KEY", help="correct all shots of this scan")
    parser.add_argument(
        "--set",
        metavar="NAME=VALUE",
        dest="settings",
        action="append",
        default=[],
        help="what was really set, as in 'coil_current=61.3 A'; NAME*=1.2 and 'NAME+=0.1 A' move each shot's own",
    )
    parser.add_argument("--because", metavar="TEXT", help="why; needed with --set")
    parser.add_argument(
        "--even-if-swept",
        action="store_true",
        help="with --scan: one value for all its shots, though the parameter moves in it",
    )
    parser.add_argument("--undo", metavar="N", type=int, help="undo the correction of this number")
    parser.add_argument("--dry-run", action="store_true", help="show what would change, change nothing")
    add_by(parser)


def run(args: Namespace) -> int:
    """Show histories, or correct settings."""
    screen = Screen.here(args.json)
    stated = typed_setting(args.settings)
    _check(args, stated)
    with opened(args, screen) as store:
        if args.undo is not None:
            done = store.undo_correction(args.undo, by=by_whom(args), dry_run=args.dry_run)
            show_correction(screen, store, done, [change.uid for change in done.changes], dry=args.dry_run)
            return 0
        if stated:
            _correct(screen, store, args, stated)
            return 0
        histories = [store.history(uid) for uid in dict.fromkeys(args.uids)]
        if screen.json:
            screen.answer({"history": [history_entry(history) for history in histories]})
            return 0
        times = local_times(store)
        for place, history in enumerate(histories):
            if place:
                screen.part()
            show_history(screen, history, times)
    return 0


def _check(args: Namespace, stated: list[Typed]) -> None:
    """Refuse what does not belong together.

    Raises
    ------
    UsageError
    """
    if args.undo is not None and (stated or args.uids or args.scan is not None or args.because is not None):
        raise UsageError(
            "--undo: it takes the number of a correction, and no UID, --scan, --set or --because"
        )
    if args.scan is not None and args.uids:
        raise UsageError("amend: found UID and --scan, wanted one of them")
    if args.even_if_swept and not (stated and args.scan is not None):
        raise UsageError("--even-if-swept: it belongs to --scan KEY --set NAME=VALUE")
    if stated:
        if args.scan is None and not args.uids:
            raise UsageError("amend: found no shot, wanted UID or --scan KEY")
        if args.because is None or not args.because.strip():
            raise UsageError("--set: found no reason, wanted --because TEXT: it stands in the shot's history")
        return
    if args.undo is not None:
        return
    if args.because is not None or args.dry_run:
        option = "--dry-run" if args.because is None else "--because"
        raise UsageError(f"{option}: found nothing to change, wanted --set NAME=VALUE")
    if args.scan is not None:
        raise UsageError("--scan: a history is of one shot; name it, or say what to correct with --set")
    if not args.uids:
        raise UsageError("amend: found no shot, wanted UID; 'nightfold shots' lists them")


def _correct(screen: Screen, store: Store, args: Namespace, stated: list[Typed]) -> None:
    """Correct settings, and say which fits are stale now."""
    scan_id = None
    if args.scan is not None:
        scan = named_scan(store, args.scan, screen)
        scan_id = scan.id
        uids, machines = store.shots(scan=scan.id, set_aside=True)["uid"].tolist(), {scan.machine}
    else:
        shots = [store.shot(uid) for uid in args.uids]
        uids, machines = list(dict.fromkeys(shot.uid for shot in shots)), {shot.machine for shot in shots}
    settings = {typed.name: typed.value(_kind(store, typed.name, machines)) for typed in stated}
    done = store.correct(
        uids if scan_id is None else [],
        settings,
        args.because,
        by=by_whom(args),
        scan=scan_id,
        even_if_swept=args.even_if_swept,
        dry_run=args.dry_run,
    )
    show_correction(screen, store, done, uids, dry=args.dry_run)


def _kind(store: Store, name: str, machines: set[str]) -> str | None:
    """Return the kind of a parameter; None if none of the machines has it.

    Raises
    ------
    UsageError
        If it is of one kind on one machine and of another on another.
    """
    table = store.parameters()
    kinds = {str(row.kind) for row in table.itertuples() if row.name == name and row.machine in machines}
    if len(kinds) > 1:
        raise UsageError(
            f"--set {name}: its kind differs between {', '.join(sorted(machines))}; do one at a time"
        )
    return kinds.pop() if kinds else None
