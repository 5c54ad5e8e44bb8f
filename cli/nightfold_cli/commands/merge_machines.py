"""``nightfold merge-machines OLD INTO --because TEXT``: one machine that was taken under two names."""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING

from nightfold_cli.arguments import add_by, by_whom
from nightfold_cli.failures import UsageError
from nightfold_cli.opening import opened
from nightfold_cli.progress import Progress
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted

if TYPE_CHECKING:
    from nightfold.merging.machines import MergeReport

HELP = "make a machine taken under a wrong name the right one"
EXAMPLES = (
    'nightfold merge-machines Heron heron --because "control program set up wrongly" --dry-run',
    'nightfold merge-machines Heron heron --because "control program set up wrongly"',
)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("old", metavar="OLD", help="the name that goes; from then on it means INTO")
    parser.add_argument("into", metavar="INTO", help="the machine that stays, with its card")
    parser.add_argument("--because", metavar="TEXT", required=True, help="why")
    parser.add_argument(
        "--dry-run", action="store_true", help="say what would become of it, and change nothing"
    )
    add_by(parser)


def run(args: Namespace) -> int:
    """Merge the machines; a file is copied beside itself first."""
    screen = Screen.here(args.json)
    if not args.because.strip():
        raise UsageError("--because: found nothing, wanted why they are merged")
    with opened(args, screen) as store, Progress("folding again", 0, sys.stderr) as progress:
        report = store.merge_machines(
            args.old,
            args.into,
            reason=args.because,
            by=by_whom(args),
            progress=progress,
            dry_run=args.dry_run,
        )
    if screen.json:
        names = (
            "old",
            "into",
            "shots",
            "scans",
            "sequences",
            "shared_sequences",
            "names",
            "shared_names",
            "doubles",
        )
        answer = {name: getattr(report, name) for name in names}
        copy = str(report.copy) if report.copy else None
        screen.answer({**answer, "copy": copy, "dry_run": report.dry_run})
        return 0
    _tell(screen, report)
    return 0


def _tell(screen: Screen, report: MergeReport) -> None:
    """Say what was merged, or would be."""
    now = "would be" if report.dry_run else "are"
    screen.text(
        f"{counted(report.shots, 'shot')} of {report.old} {now} {report.into}'s, in {counted(report.scans, 'scan')}."
    )
    screen.text(
        f"Sequences: {report.sequences}, {report.shared_sequences} of them at both. "
        f"Parameters, observables and sensors: {report.names}, {report.shared_names} of them at both."
    )
    if report.doubles:
        screen.text(
            f"{counted(report.doubles, 'shot')} {now} there under both names; those of {report.old} {now} set aside."
        )
    if report.copy:
        screen.text(f"The store as it was: {report.copy}")
    if report.dry_run:
        screen.note("Nothing was changed.")
    else:
        screen.note(f"Records that say {report.old} go to {report.into} from now on.")
