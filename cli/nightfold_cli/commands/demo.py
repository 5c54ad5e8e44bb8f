"""``nightfold demo [FOLDER]``: six weeks of an invented machine, and what comes out of them."""

from __future__ import annotations

import time
from argparse import ArgumentParser, Namespace
from pathlib import Path

from nightfold_cli.arguments import positive
from nightfold_cli.failures import UsageError
from nightfold_cli.opening import records
from nightfold_cli.render import Screen

HELP = "play six weeks of an invented machine"
EXAMPLES = ("nightfold demo", "nightfold demo heron-demo --json")
STORE = "heron.sqlite"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "folder",
        metavar="FOLDER",
        nargs="?",
        type=Path,
        default=Path("nightfold-demo"),
        help="where the files and the store go; empty or not there yet (default: nightfold-demo)",
    )

    parser.add_argument("--nights", metavar="N", type=positive, help="only the first so many nights")


def run(args: Namespace) -> int:
    """Write the campaign, take it, fit it, put right what went wrong, compare with the truth."""
    from nightfold.opening import open_store
    from nightfold_cli.demo.entries import entry
    from nightfold_cli.demo.mending import mend_all
    from nightfold_cli.demo.outcome import Outcome
    from nightfold_cli.demo.showing import go_on, show
    from nightfold_cli.demo.taking import play, take_nights, take_readings
    from nightfold_cli.demo.truths import fit_truths
    from nightfold_cli.demo.watching import look_on

    screen = Screen.here(args.json)
    folder: Path = args.folder
    _check_free(folder)
    began = time.monotonic()
    campaign = play(folder, args.nights)
    with open_store(folder / STORE, create=True) as store:
        screen.store(store.where)
        intake = take_nights(store, campaign)
        readings = take_readings(store, campaign)
        found = fit_truths(store, campaign.truths)
        mended = mend_all(store, campaign)
        seen = look_on(store, campaign, intake.amended, readings.new)
        outcome = Outcome(campaign, intake, found, mended, seen, records(store.edits()))
        if screen.json:
            screen.answer(entry(store, outcome))
        else:
            show(screen, store, outcome)
            go_on(screen, folder / STORE, outcome, time.monotonic() - began)
    return 0


def _check_free(folder: Path) -> None:
    """Refuse to write among files of others."""
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise UsageError(
            f"{folder} is there already and not empty; name another folder: nightfold demo FOLDER"
        )
