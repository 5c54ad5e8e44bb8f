"""Kept fits: what their scans are called, where their slices lie, and as JSON."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from nightfold_cli import estimates
from nightfold_cli.naming import ambiguous_labels, name_in, name_of
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.keptfit import KeptFit
    from nightfold.store import Store


def named_fits(store: Store, fits: Sequence[KeptFit]) -> list[KeptFit]:
    """Return the fits, those of scans that share a label with the id of theirs as its name."""
    from nightfold.errors import NotFound

    ids = {fit.scan_id for fit in fits}
    if len(ids) == 1:
        try:
            name = name_in(store, store.scan(*ids))
        except NotFound:  # it has no shots any more
            return list(fits)
        return [replace(fit, scan_key=name) for fit in fits]
    scans = store.scans() if ids else []
    ambiguous = ambiguous_labels(scans)
    names = {scan.id: name_of(scan, ambiguous) for scan in scans}
    return [replace(fit, scan_key=names.get(fit.scan_id, fit.scan_key)) for fit in fits]


def slice_lines(fit: KeptFit) -> list[str]:
    """Return where a slice was taken: ``hold_time 240``."""
    return [f"{name} {setting(value)}" for name, value in fit.slice.items()]


def relative_lines(fit: KeptFit) -> list[str]:
    """Return what the readings were divided by, if by anything."""
    return [f"relative to {fit.settings['relative_to']}"] if "relative_to" in fit.settings else []


def kept_entry(fit: KeptFit) -> dict[str, Any]:
    """Return a fit for JSON."""
    return {
        "id": fit.id,
        "at": fit.at,
        "scan": fit.scan_key,
        "model": fit.model,
        "background": fit.background,
        "observable": fit.observable,
        "along": fit.along,
        "relative_to": fit.settings.get("relative_to"),
        "slice": fit.slice or {},
        "estimates": {name: estimates.entry(estimate) for name, estimate in fit.estimates.items()},
        "shared_stderr": fit.shared_stderr,
        "trusted": fit.trusted,
        "warnings": [estimates.warning_entry(warning) for warning in fit.warnings],
        "shots": fit.shots,
        "set_aside": fit.set_aside,
        "settings": fit.settings,
        "stale": fit.stale,
        "version": fit.version,
    }
