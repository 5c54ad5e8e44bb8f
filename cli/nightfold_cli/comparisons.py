"""What differs between two shots of a sequence, on the screen and in a pipe."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

from nightfold_cli.printable import printable
from nightfold_cli.settings import setting
from nightfold_cli.steptext import change_text, stated_text
from nightfold_cli.timelines import flow

if TYPE_CHECKING:
    from nightfold.ledger.comparing import SettingChange, Stated, StepChange
    from nightfold.ledger.sequences import Comparison
    from nightfold_cli.canvas import Line
    from nightfold_cli.render import Screen

SIGNS = {"added": "+", "removed": "-", "moved": ">", "renamed": "?", "kept": " "}
_WIDEST_NAME = 24


def draw(screen: Screen, comparison: Comparison) -> None:
    """Draw the steps that differ, each with the settings that do, then the settings of no step."""
    for change in comparison.steps:
        screen.chart([[(f"{SIGNS[change.kind]} {printable(_step(change, screen))}", "data")]])
        screen.chart(_settings(change.settings, change.kind, screen))
    if comparison.others:
        screen.chart([[("  settings of no step", "data")]])
        screen.chart(_settings(comparison.others, "kept", screen))


def _step(change: StepChange, screen: Screen) -> str:
    """Return a step and what became of it."""
    arrow = "→" if screen.unicode else "->"
    name = change.new if change.old in (None, change.new) else change.old if change.new is None else None
    name = name or f"{change.old} {arrow} {change.new}"
    if change.kind == "added":
        return f"{name}  added, step {change.new_place}"
    if change.kind == "removed":
        return f"{name}  removed, was step {change.old_place}"
    if change.kind == "moved":
        return f"{name}  moved, step {change.old_place} {arrow} {change.new_place}"
    if change.kind == "renamed":
        return f"{name}  renamed, by the look of it, step {change.new_place}"
    return f"{name}  step {change.new_place}"


def _settings(changes: Sequence[SettingChange], kind: str, screen: Screen) -> Iterator[Line]:
    """Yield the settings of a step: of one added or removed one behind the other, else a line each."""
    unicode = screen.unicode
    if kind in ("added", "removed"):
        items = [
            printable(f"{item.name} {stated_text(item.new or item.old, unicode=unicode)}") for item in changes
        ]
        for line in flow(items, screen.width - 4):
            yield [("    " + line, "axis")]
        return
    from nightfold_cli.printable import cell_width, paragraph

    widest = min(_WIDEST_NAME, max((cell_width(printable(item.name)) for item in changes), default=0))
    for item in changes:
        name = printable(item.name)
        name += " " * (widest - cell_width(name))
        text = printable(change_text(item, unicode=unicode))
        for line in paragraph(text, screen.width, f"    {name}  ", " " * 6):
            yield [(line, "plain")]


def tabulate(comparison: Comparison) -> list[list[str]]:
    """Return a row a difference, for programs: change, old and new step, setting, old and new value, each with unit."""
    rows = []
    for change in comparison.steps:
        head = [change.kind, change.old or "", change.new or ""]
        rows += [[*head, *_cells(item)] for item in change.settings] or [[*head, *[""] * 5]]
    return rows + [["kept", "", "", *_cells(item)] for item in comparison.others]


def _cells(item: SettingChange) -> list[str]:
    return [item.name, *_stated(item.old), *_stated(item.new)]


def _stated(stated: Stated | None) -> list[str]:
    return ["", ""] if stated is None else [setting(stated.value), stated.unit]


def entry(comparison: Comparison) -> dict[str, Any]:
    """Return a comparison for JSON."""
    return {
        "old": _side(comparison.old),
        "new": _side(comparison.new),
        "steps": [
            {
                "kind": change.kind,
                "old": change.old,
                "new": change.new,
                "old_place": change.old_place,
                "new_place": change.new_place,
                "settings": [_change(item) for item in change.settings],
            }
            for change in comparison.steps
        ],
        "others": [_change(item) for item in comparison.others],
        "renumbered": [{"old": old, "new": new} for old, new in comparison.renumbered],
    }


def _side(side: Any) -> dict[str, Any]:
    return {
        "version": side.version,
        "shot": side.uid,
        "started": side.started,
        "duration_s": side.duration_s,
    }


def _change(item: SettingChange) -> dict[str, Any]:
    from nightfold_cli.steptext import plain_value

    sides = {"old": item.old, "new": item.new}
    return {
        "name": item.name,
        **{
            side: None
            if stated is None
            else {"value": plain_value(stated.value), "unit": stated.unit or None}
            for side, stated in sides.items()
        },
    }
