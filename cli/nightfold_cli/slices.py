"""Fits of slices on the screen: a line a slice, then one estimate as a chart or as a map."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from itertools import product
from typing import TYPE_CHECKING, Any

from nightfold_cli import estimates
from nightfold_cli.charts import Side, map_of_values
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.plots import Chart, Label, Points
from nightfold_cli.settings import aligned, setting

if TYPE_CHECKING:
    from nightfold.fits.estimate import Estimate
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.scans.axes import Axis
    from nightfold.scans.scan import Scan
    from nightfold_cli.render import Screen

_HEIGHT = 12
_WIDEST = 100
_MOST_MAPS = 6


@dataclass(frozen=True, slots=True)
class Slice:
    """One fit: where in the scan, and what came out."""

    where: dict[str, Any]
    result: FitResult


def parts_of(outcome: FitResult | FitTable) -> list[Slice]:
    """Return the fits of an outcome, one a slice."""
    from nightfold.fits.many import FitTable

    if isinstance(outcome, FitTable):
        return [Slice(dict(where), outcome.result(row)) for row, where in enumerate(outcome.slices)]
    return [Slice({}, outcome)]


def show_slices(
    screen: Screen,
    scan: Scan,
    heading: tuple[str, str],
    parts: Sequence[Slice],
    fixed: Collection[str],
    estimate: str | None,
) -> None:
    """Show a line a slice, a chart or maps of one estimate, and what not to trust."""
    screen.heading(*heading)
    others = [axis for axis in scan.axes if parts and axis.parameter in parts[0].where]
    _tabulate(screen, others, parts, fixed)
    if parts:
        from nightfold.fits.principal import chosen_estimate

        first = parts[0].result
        _draw(
            screen,
            others,
            parts,
            chosen_estimate([*first.estimates, *first.derived], first.request, estimate),
        )
    doubted = [part for part in parts if not part.result.trusted]
    if doubted:
        screen.heading(f"DO NOT TRUST {len(doubted)} of {len(parts)} slices")
        seen: dict[str, str] = {}
        for part in doubted:
            for warning in part.result.warnings:
                if not warning.advisory:
                    seen.setdefault(warning.code, warning.message)
        for code, message in seen.items():
            screen.item(code, message)


def _tabulate(screen: Screen, others: Sequence[Axis], parts: Sequence[Slice], fixed: Collection[str]) -> None:
    """Show a line a slice."""
    names = list(parts[0].result.estimates) if parts else []
    units = {name: parts[0].result.estimates[name].unit for name in names}
    columns = [
        *(Column(_named(axis.parameter, axis.unit), right=True) for axis in others),
        *(Column(_named(name, units[name]), right=True, spare=rank) for rank, name in enumerate(names)),
        Column("trust", wraps=True),
    ]
    settings = [aligned([part.where[axis.parameter] for part in parts]) for axis in others]
    rows: list[Row] = [
        [
            *(column[place] for column in settings),
            *(
                estimates.value_text(estimate, fixed=name in fixed)
                for name, estimate in part.result.estimates.items()
            ),
            _trust(part.result),
        ]
        for place, part in enumerate(parts)
    ]
    screen.table(columns, rows, empty="no slices")


def _numbers(part: Slice) -> dict[str, Estimate]:
    """Return the estimates of a slice, and what is derived of them."""
    return part.result.estimates | part.result.derived


def _draw(screen: Screen, others: Sequence[Axis], parts: Sequence[Slice], name: str) -> None:
    """Draw one estimate over the other axes."""
    unit = _numbers(parts[0])[name].unit
    if len(others) == 1:
        _draw_chart(screen, others[0], parts, Label(name, unit))
    elif len(others) > 1:
        _draw_maps(screen, others, parts, name, unit)


def _draw_chart(screen: Screen, axis: Axis, parts: Sequence[Slice], y: Label) -> None:
    """Draw an estimate over one axis with its 68 % intervals; those that are not to be trusted are crosses."""
    at = [part.where[axis.parameter] for part in parts]
    if len(at) < 2 or any(isinstance(value, str | bool) for value in at):
        return
    found = [_numbers(part)[y.name] for part in parts]
    doubted = [not part.result.trusted for part in parts]
    ends = [estimate.interval(estimates.LEVEL_68) for estimate in found]
    shown = [
        (low, high) if not doubt else (estimate.value, estimate.value)
        for (low, high), doubt, estimate in zip(ends, doubted, found, strict=True)
    ]
    points = Points(
        at,
        [estimate.value for estimate in found],
        flagged=doubted,
        low=[low for low, _ in shown],
        high=[high for _, high in shown],
    )
    chart = Chart(
        points,
        Label(axis.parameter, axis.unit),
        y,
        width=min(screen.width, _WIDEST) - 1,
        height=_HEIGHT,
        unicode=screen.unicode,
    )
    screen.gap()
    screen.chart(chart.lines())
    marks = [f"{chart.glyphs.mark} value", f"{chart.glyphs.bar} its 68 % interval"]
    screen.note(", ".join([*marks, *([f"{chart.glyphs.flagged} not to be trusted"] if any(doubted) else [])]))


def _draw_maps(screen: Screen, others: Sequence[Axis], parts: Sequence[Slice], name: str, unit: str) -> None:
    """Draw an estimate over the two longest axes, a map for each setting of the others."""
    sides = {
        axis.parameter: Side(_named(axis.parameter, axis.unit), _settings(axis, parts)) for axis in others
    }
    across, up, *beyond = sorted(sides, key=lambda each: -len(sides[each].values))
    wheres = list(product(*(sides[each].values for each in beyond)))
    for where in wheres[:_MOST_MAPS]:
        inside = [
            part for part in parts if all(part.where[k] == v for k, v in zip(beyond, where, strict=True))
        ]
        found = {(part.where[across], part.where[up]): part for part in inside}
        at = ", ".join(f"{each} {setting(value)}" for each, value in zip(beyond, where, strict=True))
        screen.heading(_named(name, unit), at)
        screen.chart(
            map_of_values(
                {place: _numbers(part)[name].value for place, part in found.items()},
                sides[across],
                sides[up],
                unicode=screen.unicode,
                hole="no slice",
                doubted={
                    place
                    for place, part in found.items()
                    if not part.result.trusted and math.isfinite(_numbers(part)[name].value)
                },
            )
        )
    if len(wheres) > _MOST_MAPS:
        screen.note(f"{len(wheres) - _MOST_MAPS} more maps not shown")


def _settings(axis: Axis, parts: Sequence[Slice]) -> list[Any]:
    """Return the settings of an axis that have slices, in order."""
    return sorted({part.where[axis.parameter] for part in parts})


def _trust(result: FitResult) -> Cell:
    """Return whether to trust a slice."""
    if result.trusted:
        return Cell("yes")
    return Cell("NO, " + ", ".join(warning.code for warning in result.warnings if not warning.advisory))


def _named(name: str, unit: str | None) -> str:
    """Return a column's head: ``center (A)``."""
    return f"{name} ({unit})" if unit else name
