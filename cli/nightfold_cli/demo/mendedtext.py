"""The part of the demo's screen on what laboratories do: what went wrong, what was done, found beside true."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from nightfold.concise import concise, plain
from nightfold_cli.demo.mending import HAPPENED, Mended
from nightfold_cli.demo.truths import MACHINE, Found
from nightfold_cli.demo.watching import Seen, SeenVersion, SeenWarming
from nightfold_cli.layout import Column, Row
from nightfold_cli.opening import local_times
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.store import Store

_COLUMNS = (
    Column("what happened", wraps=True, least=16),
    Column("what was done", wraps=True, least=16),
    Column("true", right=True, plain_name="truth"),
    Column("without", right=True, spare=2),
    Column("found", right=True, plain_name="value"),
    Column("unit"),
    Column("holds it", plain_name="held"),
)


def show_mended(screen: Screen, mended: Sequence[Mended]) -> None:
    """Show what was done about each mishap, and what fits find without it and with it."""
    if not mended:
        return
    screen.heading(
        "what went otherwise than planned", "what fits find without, and with what was done about it"
    )
    screen.part()
    rows: list[Row] = []
    for item in mended:
        for place, (without, found) in enumerate(zip(item.without, item.found, strict=True)):
            said = [HAPPENED[item.mishap.kind], item.done]
            if place and screen.terminal:
                said = ["", found.truth.what.partition(" (")[0]]
            value = plain(round(found.truth.value, 5))
            rows.append([*said, value, _number(without), _number(found), found.truth.unit, found.verdict])
    screen.table(_COLUMNS, rows, empty="nothing went wrong", spaced=True)


def _number(found: Found | None) -> str:
    if found is None or found.estimate is None:
        return "-"
    return concise(found.estimate.value, found.estimate.stderr)


def show_seen(screen: Screen, store: Store, seen: Seen) -> None:
    """Show what the store tells beside fits; only people need it."""
    if not screen.terminal:
        return
    fields = [("sensors", f"{seen.readings} readings of {seen.sensors} sensors")]
    fields += [(item.truth.sensor, _warming(item)) for item in seen.warmings]
    fields += [(item.truth.sequence, _version(store, item)) for item in seen.versions]
    if seen.amended:
        fields.append(("late", f"readings of {seen.amended} shots came minutes after them, in the same file"))
    if seen.notes:
        fields.append(("notes", f"{seen.notes}, with the shots that they came with"))
    screen.gap()
    screen.fields(fields)


def _warming(item: SeenWarming) -> str:
    cause = f"after {item.truth.cause} was edited"
    if item.step is None or item.stderr is None:
        return f"{item.truth.step} K higher {cause}; too few days to tell"
    return f"{concise(item.step, item.stderr)} K higher {cause}, true {item.truth.step} K"


def _version(store: Store, item: SeenVersion) -> str:
    if item.found is None:
        return f"the step {item.truth.step} was NOT found"
    at = local_times(store).local(item.found, MACHINE)
    late_s = abs((item.found - item.truth.at).total_seconds())
    told = "found to the shot" if late_s < 1 else f"found {late_s / 60:.0f} min off"
    return f"{item.versions} versions, with the step {item.truth.step} since {at:%Y-%m-%d %H:%M}, {told}"
