"""``nightfold amend UID…``: what happened to a shot since, and corrections of its settings."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import add_by, by_whom
from nightfold_cli.failures import UsageError
from nightfold_cli.historytext import history_entry, show_history
from nightfold_cli.keptfits import named_fits, relative_lines, slice_lines
from nightfold_cli.naming import named_scan
from nightfold_cli.opening import local_times, opened
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.typed import typed_value

if TYPE_CHECKING:
    from nightfold.fits.keptfit import KeptFit
    from nightfold.store import Store

HELP = "tell the history of a shot, or correct its settings"
EXAMPLES = (
    "nightfold amend 5f3a9c0e",
    'nightfold amend 5f3a9c0e --set "coil_current=61.3 A" --because "read off the supply"',
    'nightfold amend --scan loss-coarse --set imaging_axis=y --because "cable swapped"',
)
_FEW = 3


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
        help="what was really set; a number may have a unit, as in 'coil_current=61.3 A'",
    )
    parser.add_argument("--because", metavar="TEXT", help="why; needed with --set")
    add_by(parser)


def run(args: Namespace) -> int:
    """Show histories, or correct settings."""
    screen = Screen.here(args.json)
    stated = _stated(args.settings)
    _check(args, stated)
    with opened(args, screen) as store:
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


def _stated(given: Sequence[str]) -> dict[str, str]:
    """Return names and values that were typed.

    Raises
    ------
    UsageError
    """
    stated: dict[str, str] = {}
    for text in given:
        name, equals, value = text.partition("=")
        name = name.strip()
        if not equals or not name or not value.strip():
            raise UsageError(f"--set: found {text!r}, wanted NAME=VALUE, as in 'coil_current=61.3 A'")
        if name in stated:
            raise UsageError(f"--set {name}: found it twice, wanted one value")
        stated[name] = value
    return stated


def _check(args: Namespace, stated: dict[str, str]) -> None:
    """Refuse what does not belong together.

    Raises
    ------
    UsageError
    """
    if args.scan is not None and args.uids:
        raise UsageError("amend: found UID and --scan, wanted one of them")
    if stated:
        if args.scan is None and not args.uids:
            raise UsageError("amend: found no shot, wanted UID or --scan KEY")
        if args.because is None or not args.because.strip():
            raise UsageError("--set: found no reason, wanted --because TEXT: it stands in the shot's history")
        return
    if args.because is not None:
        raise UsageError("--because: found nothing to change, wanted --set NAME=VALUE")
    if args.scan is not None:
        raise UsageError("--scan: a history is of one shot; name it, or say what to correct with --set")
    if not args.uids:
        raise UsageError("amend: found no shot, wanted UID; 'nightfold shots' lists them")


def _correct(screen: Screen, store: Store, args: Namespace, stated: dict[str, str]) -> None:
    """Correct settings, and say which fits are stale now."""
    if args.scan is not None:
        scan = named_scan(store, args.scan, screen)
        uids, machines = store.shots(scan=scan.id, set_aside=True)["uid"].tolist(), {scan.machine}
    else:
        shots = [store.shot(uid) for uid in args.uids]
        uids, machines = list(dict.fromkeys(shot.uid for shot in shots)), {shot.machine for shot in shots}
    settings = {name: typed_value(name, text, _kind(store, name, machines)) for name, text in stated.items()}
    changed = store.correct(uids, settings, args.because, by=by_whom(args))
    stale = named_fits(store, [fit for fit in store.fits(shots=uids) if fit.stale])
    if screen.json:
        screen.answer({"corrected": changed, "shots": uids, "stale": [_entry(fit) for fit in stale]})
        return
    unchanged = len(uids) - changed
    already = f"; {unchanged} had it so already" if unchanged else ""
    screen.text(f"{counted(changed, 'shot')} corrected{already}")
    if not stale:
        return
    screen.heading(f"{counted(len(stale), 'kept fit')} stale now")
    for fit in stale:
        where = "".join(f", {line}" for line in (*relative_lines(fit), *slice_lines(fit)))
        screen.item(fit.scan_key, f"{fit.model}, {fit.observable} along {fit.along}{where}")
    keys = list(dict.fromkeys(fit.scan_key for fit in stale))
    commands = [f"nightfold fit --again {key}".rstrip() for key in (keys if len(keys) <= _FEW else [""])]
    screen.gap()
    screen.note("'fit --again' brings them up to date:")
    for command in commands:
        if screen.terminal:
            screen.command(command)
        else:
            screen.say(f"go on with: {command}")


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


def _entry(fit: KeptFit) -> dict[str, Any]:
    """Return a stale fit for JSON."""
    return {
        "id": fit.id,
        "scan": fit.scan_key,
        "model": fit.model,
        "observable": fit.observable,
        "along": fit.along,
        "slice": fit.slice,
    }
