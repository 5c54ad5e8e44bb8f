"""Estimates of a fit: as lines of a table, as cells, and as JSON."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from nightfold.concise import NOT_DETERMINED, asymmetric, interval, plain, rounded
from nightfold_cli.layout import Column, Row

if TYPE_CHECKING:
    from nightfold.fits.estimate import Estimate
    from nightfold.fits.keptfit import KeptEstimate
    from nightfold.fits.result import FitWarning

    AnyEstimate = Estimate | KeptEstimate

LEVEL_68, LEVEL_95 = 0.6827, 0.95
ON_SCREEN = (
    Column("estimate"),
    Column("value", right=True),
    Column("unit"),
    Column("95 % interval"),
)


def value_text(estimate: AnyEstimate, *, fixed: bool = False) -> str:
    """Return an estimate in concise notation, with its 68 % interval where that is lopsided."""
    if fixed:
        return f"{plain(estimate.value)} fixed"
    if not math.isfinite(estimate.stderr):
        return NOT_DETERMINED
    return asymmetric(estimate.value, estimate.stderr, *estimate.interval(LEVEL_68))


def unit_text(estimate: AnyEstimate, *, fixed: bool = False) -> str:
    """Return the unit to stand behind the value; none behind words."""
    return estimate.unit if fixed or value_text(estimate) != NOT_DETERMINED else ""


def interval_text(estimate: AnyEstimate) -> str:
    """Return the 95 % interval, to the same place as the value."""
    low, high = estimate.interval(LEVEL_95)
    return interval(low, high, estimate.value, estimate.stderr)


def rows(estimates: Mapping[str, Estimate], fixed: Collection[str]) -> list[Row]:
    """Return a line an estimate, for the columns name, value, unit and interval."""
    return [
        [
            name,
            value_text(estimate, fixed=name in fixed),
            unit_text(estimate, fixed=name in fixed),
            "" if name in fixed else interval_text(estimate),
        ]
        for name, estimate in estimates.items()
    ]


def sentence(estimates: Mapping[str, Estimate]) -> str:
    """Return estimates one after the other, each with its name and unit."""
    parts = (
        f"{name} {value_text(estimate)} {unit_text(estimate)}".rstrip()
        for name, estimate in estimates.items()
    )
    return ", ".join(parts)


def plain_rows(estimates: Mapping[str, AnyEstimate]) -> list[Row]:
    """Return a line an estimate for programs, with all digits."""
    return [
        [
            name,
            repr(estimate.value),
            repr(estimate.stderr),
            estimate.unit,
            *(repr(end) for end in estimate.interval(LEVEL_95)),
        ]
        for name, estimate in estimates.items()
    ]


def shared_text(shared: Mapping[str, float], names: Sequence[str]) -> str:
    """Return the part of the uncertainties that is due to reference shots."""
    if any(math.isnan(shared[name]) for name in names):
        return (
            "of the stderr, due to reference shots: not all known (none stated, and too few of them to see "
            "their scatter); what is not known is left out"
        )
    parts = ", ".join(f"{name} {rounded(shared[name], 2)}" for name in names)
    return f"of the stderr, due to reference shots: {parts}"


def entry(estimate: AnyEstimate) -> dict[str, Any]:
    """Return an estimate for JSON."""
    return {
        "value": estimate.value,
        "stderr": estimate.stderr,
        "interval68": list(estimate.interval(LEVEL_68)),
        "interval95": list(estimate.interval(LEVEL_95)),
        "unit": estimate.unit,
    }


def warning_entry(warning: FitWarning) -> dict[str, Any]:
    """Return a warning for JSON."""
    return {"code": warning.code, "message": warning.message, "advisory": warning.advisory}
