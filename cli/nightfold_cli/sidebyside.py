"""Several models of the same data side by side: on the screen, and as JSON."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from nightfold.concise import in_parts, rounded
from nightfold_cli import estimates
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.scantext import counted
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.comparison import Candidate, Combined, Comparison
    from nightfold_cli.render import Screen
    from nightfold_cli.slices import Slice

_LEAST = 0.001


def compare(fits: Sequence[tuple[str, Sequence[Slice]]], estimate: str | None) -> list[Comparison]:
    """Return the comparisons, one a slice; none of a single model."""
    if len(fits) < 2:
        return []
    from dataclasses import replace

    from nightfold.fits.comparison import compare_fits

    return [
        replace(compare_fits([part.result for part in parts], estimate=estimate), where=parts[0].where)
        for parts in zip(*(parts for _, parts in fits), strict=True)
    ]


def show_comparison(screen: Screen, compared: Sequence[Comparison]) -> None:
    """Show a line a model, and the average with its two uncertainties."""
    for each in compared:
        where = ", ".join(f"{name} {setting(value)}" for name, value in each.where.items())
        screen.heading(
            "models side by side", f"{where + ', ' if where else ''}by AICc of {counted(each.n, 'shot')}"
        )
        head = f"{each.estimate}" if each.estimate else "estimate"
        columns = [
            Column("model"),
            Column("weight", right=True),
            Column("ΔAICc" if screen.unicode else "dAICc", right=True),
            Column("free", right=True, spare=1),
            Column(head, right=True),
            Column("trust"),
        ]
        screen.table(columns, [_row(each, candidate) for candidate in each.candidates], empty="no models")
        for line in _said(each):
            screen.text(line)


def _row(comparison: Comparison, candidate: Candidate) -> Row:
    """Return the line of a model."""
    own = "" if comparison.estimate else f"{candidate.name} "
    value = estimates.value_text(candidate.estimate)
    return [
        candidate.model,
        _weight(candidate.weight),
        f"{candidate.delta:.1f}" if math.isfinite(candidate.delta) else "-",
        str(candidate.free),
        f"{own}{value} {candidate.estimate.unit}".strip(),
        Cell("yes" if candidate.trusted else "NO"),
    ]


def _weight(weight: float) -> str:
    """Return a share of belief."""
    if math.isnan(weight):
        return "-"
    return f"{weight:.3f}" if weight >= _LEAST or not weight else f"< {_LEAST}"


def _said(comparison: Comparison) -> list[str]:
    """Return the average over the models in words."""
    if comparison.estimate is None:
        return ["These models have no position or rate in common; --estimate NAME compares another estimate."]
    if comparison.combined is None:
        return ["There are too few shots to weigh these models against each other."]
    combined, unit = comparison.combined, comparison.combined.unit
    lines = [
        f"{comparison.estimate} over all models: {_parts(combined)} {unit}".rstrip()
        + ": in brackets its standard uncertainty, then what the choice of the model adds. "
        + f"Between the models: {rounded(comparison.spread)} {unit}".rstrip()
        + "."
    ]
    if not combined.trusted:
        lines.append("DO NOT TRUST this average: a model of some weight is not to be trusted.")
    return lines


def _parts(combined: Combined) -> str:
    """Return ``61.362(20)(7)``."""
    return in_parts(combined.value, combined.stderr, combined.model_stderr)


def comparison_entry(comparison: Comparison) -> dict[str, Any]:
    """Return a comparison for JSON."""
    combined = comparison.combined
    return {
        "slice": dict(comparison.where),
        "shots": comparison.n,
        "estimate": comparison.estimate,
        "models": [each.row() for each in comparison.candidates],
        "combined": None
        if combined is None
        else {
            "value": combined.value,
            "stderr": combined.stderr,
            "model_stderr": combined.model_stderr,
            "unit": combined.unit,
            "trusted": combined.trusted,
        },
        "spread": comparison.spread,
    }
