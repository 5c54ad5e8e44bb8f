"""The screens of the demo: how much was taken, found beside true, what people changed, what to go on with."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from nightfold.concise import concise, interval, plain
from nightfold_cli.demo.mendedtext import show_mended, show_seen
from nightfold_cli.demo.mending import TO_TRY
from nightfold_cli.demo.outcome import Outcome, same
from nightfold_cli.demo.truths import MACHINE, Found
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times
from nightfold_cli.render import Screen
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.ledger.outcome import Intake
    from nightfold.simulator import Campaign, TrueEdit
    from nightfold.store import Store


def show(screen: Screen, store: Store, outcome: Outcome) -> None:
    """Show everything, for people or for a pipe."""
    _show_counts(screen, store, outcome.campaign, outcome.intake)
    _show_truths(screen, outcome.found)
    show_mended(screen, outcome.mended)
    show_seen(screen, store, outcome.seen)
    _show_edits(screen, store, outcome.campaign.edits, outcome.edits)


def _show_counts(screen: Screen, store: Store, campaign: Campaign, intake: Intake) -> None:
    """Say how much was taken."""
    if not screen.terminal:
        return
    scans = store.scans()
    labelled = sum(scan.label is not None for scan in scans)
    settings = len(store.parameters(MACHINE))
    screen.heading("heron", "an invented potassium-39 machine, whose true numbers are known")
    screen.fields(
        [
            ("nights", str(len(campaign.files))),
            ("shots", f"{intake.new} taken, {len(intake.refused)} refused"),
            ("settings", f"{settings} parameters, {len(store.observables(MACHINE))} observables"),
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
            item.verdict,
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


def _show_edits(
    screen: Screen, store: Store, true: Sequence[TrueEdit], edits: Sequence[dict[str, Any]]
) -> None:
    """Show the edits that were found beside those that were made."""
    if not screen.terminal:
        return
    times = local_times(store)
    screen.heading("settings changed by hand", "made, and found in the record")
    moments = [times.local(edit.at, MACHINE) for edit in true]
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
    others = [edit for edit in edits if not any(same(one, edit) for one in true)]
    if others:
        screen.text(f"{len(others)} more changes look like edits; 'nightfold edits' lists them.", indent="  ")


def _sighting(true: TrueEdit, edits: Sequence[dict[str, Any]]) -> Cell:
    """Return when an edit was found, counted from when it was made."""
    late_s = [(edit["at"] - true.at).total_seconds() for edit in edits if same(true, edit)]
    if not late_s:
        return Cell("NO")
    return Cell("yes, to the shot" if abs(min(late_s)) < 1 else f"yes, {min(late_s) / 60:.0f} min later")


def go_on(screen: Screen, where: Path, outcome: Outcome, elapsed_s: float) -> None:
    """Name the commands to go on with; on stderr where the answer goes into a pipe."""
    screen.heading("go on with", f"this took {elapsed_s:.0f} s")
    for command in _commands(outcome):
        line = f"nightfold --store {where} {command}"
        if screen.terminal:
            screen.command(line)
        else:
            screen.say(f"go on with: {line}")


def _commands(outcome: Outcome) -> list[str]:
    key = next((item.scan for item in outcome.found if item.scan and item.truth.along is None), "1")
    truth = next(item.truth for item in outcome.found if item.scan == key)
    commands = ["nights", "scans", f"scan {key}", f"fit {key} {truth.model} -o {truth.observable}", "edits"]
    return commands + [TO_TRY[item.mishap.kind] for item in outcome.mended if item.mishap.kind in TO_TRY]
