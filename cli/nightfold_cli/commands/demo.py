"""``nightfold demo [FOLDER]``: six weeks of an invented machine, and what comes out of them."""

from __future__ import annotations

import sys
import time
from argparse import ArgumentParser, Namespace
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import positive
from nightfold_cli.concise import concise, interval, plain
from nightfold_cli.failures import UsageError
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times, records
from nightfold_cli.progress import Progress
from nightfold_cli.render import Screen
from nightfold_cli.settings import setting
from nightfold_cli.truths import Found, fit_truths

if TYPE_CHECKING:
    from nightfold.ledger.outcome import Intake
    from nightfold.simulator import Campaign, TrueEdit
    from nightfold.store import Store

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
    """Write the campaign, take it, fit it, compare."""
    from nightfold.opening import open_store
    from nightfold.simulator import write_campaign
    from nightfold.simulator.schedule import NIGHTS

    screen = Screen.here(args.json)
    folder: Path = args.folder
    _check_free(folder)
    began = time.monotonic()
    nights = args.nights or NIGHTS
    with Progress("simulating nights", nights, sys.stderr) as progress:
        campaign = write_campaign(folder, nights=nights, progress=progress)
    with open_store(folder / STORE, create=True) as store:
        screen.store(store.where)
        store.use_card(campaign.card)
        intake = _take(store, campaign)
        found = fit_truths(store, campaign.truths)
        edits = records(store.edits())
        if screen.json:
            screen.answer(_entry(store, campaign, intake, found, edits))
            return 0
        _show_counts(screen, store, campaign, intake)
        _show_truths(screen, found)
        _show_edits(screen, store, campaign.edits, edits)
        _go_on(screen, folder / STORE, found, time.monotonic() - began)
    return 0


def _check_free(folder: Path) -> None:
    """Refuse to write among files of others."""
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise UsageError(
            f"{folder} is there already and not empty; name another folder: nightfold demo FOLDER"
        )


def _take(store: Store, campaign: Campaign) -> Intake:
    """Take all nights."""
    from nightfold.ledger.outcome import Intake

    total = Intake()
    with Progress("taking shots", len(campaign.files), sys.stderr) as progress:
        for count, path in enumerate(campaign.files):
            progress(count)
            total = total + store.take_file(path)
    return total


def _show_counts(screen: Screen, store: Store, campaign: Campaign, intake: Intake) -> None:
    """Say how much was taken."""
    if not screen.terminal:
        return
    scans = store.scans()
    labelled = sum(scan.label is not None for scan in scans)
    settings = len(store.parameters())
    screen.heading("heron", "an invented potassium-39 machine, whose true numbers are known")
    screen.fields(
        [
            ("nights", str(len(campaign.files))),
            ("shots", f"{intake.new} taken, {len(intake.refused)} refused"),
            ("settings", f"{settings} parameters, {len(store.observables())} observables"),
            ("scans", f"{len(scans)}: {labelled} by their label, {len(scans) - labelled} found without one"),
        ]
    )
    for item in intake.refused[:5]:
        screen.item(f"refused {item.source}:{item.line}", item.reason)


def _show_truths(screen: Screen, found: Sequence[Found]) -> None:
    """Show what was found beside the truth."""
    screen.heading("found and true", "every scan whose truth is stated, fitted with the defaults")
    columns = [
        Column("what", wraps=True, least=30),
        Column("true", right=True, plain_name="truth"),
        Column("found", right=True, plain_name="value"),
        Column("unit"),
        Column("95 % interval", spare=2),
        Column("holds it", plain_name="held"),
    ]
    rows: list[Row] = [
        [
            item.truth.what,
            plain(item.truth.value),
            concise(item.estimate.value, item.estimate.stderr) if item.estimate else "-",
            item.truth.unit,
            _interval(item),
            _verdict(item),
        ]
        for item in found
    ]
    screen.table(columns, rows, empty="no truth is stated")
    held = sum(item.held is True for item in found)
    if screen.terminal:
        screen.text(
            f"{held} of {len(found)} intervals hold the truth. Of 95 % intervals one in twenty misses, "
            "and that is as it should be.",
            indent="  ",
        )


def _interval(item: Found) -> str:
    """Return the 95 % interval of a truth's estimate."""
    if item.estimate is None or item.interval95 is None:
        return "-"
    return interval(*item.interval95, item.estimate.value, item.estimate.stderr)


def _verdict(item: Found) -> str:
    """Return whether the interval holds the truth, and whether the fit says not to trust it."""
    if item.held is None:
        return item.problem or "-"
    return ("yes" if item.held else "NO") + ("" if item.trusted else ", not trusted")


def _show_edits(
    screen: Screen, store: Store, true: Sequence[TrueEdit], edits: Sequence[dict[str, Any]]
) -> None:
    """Show the edits that were found beside those that were made."""
    if not screen.terminal:
        return
    times = local_times(store)
    screen.heading("settings changed by hand", "made, and found in the record")
    moments = [times.local(edit.at) for edit in true]
    columns = [
        Column(heading(moments, "made")),
        Column("parameter"),
        Column("old", right=True),
        Column("new", right=True),
        Column("found", wraps=True),
    ]
    rows: list[Row] = [
        [when, edit.parameter, setting(edit.old), setting(edit.new), _sighting(edit, edits)]
        for when, edit in zip(compact(moments), true, strict=True)
    ]
    screen.table(columns, rows, empty="none was made")
    others = [edit for edit in edits if not any(_same(one, edit) for one in true)]
    if others:
        screen.text(f"{len(others)} more changes look like edits; 'nightfold edits' lists them.", indent="  ")


def _same(true: TrueEdit, found: dict[str, Any]) -> bool:
    """Return whether a found edit is the one that was made."""
    return bool(found["parameter"] == true.parameter and setting(found["new"]) == setting(true.new))


def _sighting(true: TrueEdit, edits: Sequence[dict[str, Any]]) -> Cell:
    """Return when an edit was found, counted from when it was made."""
    same = [edit for edit in edits if _same(true, edit)]
    if not same:
        return Cell("NO")
    late_s = min((edit["at"] - true.at).total_seconds() for edit in same)
    return Cell("yes, to the shot" if abs(late_s) < 1 else f"yes, {late_s / 60:.0f} min later")


def _go_on(screen: Screen, where: Path, found: Sequence[Found], elapsed_s: float) -> None:
    """Name the commands to go on with; on stderr where the answer goes into a pipe."""
    key = next((item.scan for item in found if item.scan and item.truth.along is None), "1")
    truth = next(item.truth for item in found if item.scan == key)
    store = f"nightfold --store {where}"
    screen.heading("go on with", f"this took {elapsed_s:.0f} s")
    for command in (
        "nights",
        "scans",
        f"scan {key}",
        f"fit {key} {truth.model} -o {truth.observable}",
        "edits",
    ):
        if screen.terminal:
            screen.command(f"{store} {command}")
        else:
            screen.say(f"go on with: {store} {command}")


def _entry(
    store: Store, campaign: Campaign, intake: Intake, found: Sequence[Found], edits: Sequence[dict[str, Any]]
) -> dict[str, Any]:
    """Return everything for JSON."""
    return {
        "store": store.where,
        "shots": campaign.shots,
        "new": intake.new,
        "refused": len(intake.refused),
        "scans": len(store.scans()),
        "truths": [_truth_entry(item) for item in found],
        "changes": [
            {
                "truth": {
                    "kind": change.kind,
                    "at": change.at,
                    "observable": change.observable,
                    "size": change.size,
                    "cause": change.cause,
                },
                "found": None,
            }
            for change in campaign.changes
        ],
        "edits": [
            {
                "truth": {"at": edit.at, "parameter": edit.parameter, "old": edit.old, "new": edit.new},
                "found": next((one for one in edits if _same(edit, one)), None),
            }
            for edit in campaign.edits
        ],
    }


def _truth_entry(item: Found) -> dict[str, Any]:
    """Return a truth and what was found for JSON."""
    estimate = item.estimate
    return {
        "what": item.truth.what,
        "truth": item.truth.value,
        "value": estimate.value if estimate else None,
        "stderr": estimate.stderr if estimate else None,
        "interval95": list(item.interval95) if item.interval95 else None,
        "unit": item.truth.unit,
        "scan": item.scan,
        "trusted": item.trusted,
        "problem": item.problem or None,
    }
