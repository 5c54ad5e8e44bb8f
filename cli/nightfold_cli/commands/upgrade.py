"""``nightfold upgrade``: bring a store of an older nightfold up to date."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace

from nightfold_cli.render import Screen

HELP = "bring a store of an older nightfold up to date"
EXAMPLES = ("nightfold --store old.sqlite upgrade",)


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments: none but those of every command."""


def run(args: Namespace) -> int:
    """Upgrade the store; a file is copied first."""
    from nightfold.opening import upgrade_store

    screen = Screen.here(args.json)
    screen.store(args.store)
    report = upgrade_store(args.store)
    if screen.json:
        screen.answer(
            {
                "before": report.before,
                "after": report.after,
                "copy": str(report.copy) if report.copy else None,
            }
        )
        return 0
    if report.before == report.after:
        screen.text(
            f"Nothing to do: the store is at revision {report.after}, the newest this nightfold knows."
        )
        return 0
    screen.text(f"Upgraded from revision {report.before} to {report.after}.")
    if report.copy:
        screen.text(f"The store as it was: {report.copy}")
    return 0
