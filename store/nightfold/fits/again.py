"""Doing kept fits again, the same way, where their data have changed since."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from nightfold.errors import NightfoldError
from nightfold.fits.kept import keep_fit, list_fits, slice_text
from nightfold.fits.keptfit import KeptFit
from nightfold.fits.scanfit import FitRequest, fit_slices
from nightfold.scans.listing import find_scan
from nightfold.scans.scan import Scan
from nightfold.session import Session


@dataclass(frozen=True)
class Refit:
    """What became of one kept fit that was to be done again.

    Attributes
    ----------
    before : KeptFit or None
        None for a slice that the scan did not have when it was fitted.
    after : KeptFit or None
        The fit as it is now; None if it was left as it was.
    left : str or None
        Why it was left.
    """

    before: KeptFit | None
    after: KeptFit | None
    left: str | None = None


def refit(session: Session, scan: Scan | None, *, stale_only: bool) -> list[Refit]:
    """Do the fits kept of one scan, or of all, again as they were done; return what became of each, oldest first."""
    kept = list_fits(session, scan)
    groups: dict[tuple[Any, ...], list[KeptFit]] = {}
    for fit in kept:
        groups.setdefault(_request_of(fit), []).append(fit)
    done: list[Refit] = []
    for group in groups.values():
        stale = [fit for fit in group if fit.stale or not stale_only]
        if stale:
            done += _again(session, stale, kept)
    return done


def _request_of(fit: KeptFit) -> tuple[Any, ...]:
    """Return what fits have in common that were one request: a scan of several axes is fitted slice by slice."""
    return (
        fit.scan_id,
        fit.observable,
        fit.along,
        fit.model,
        fit.background,
        repr(sorted(fit.settings.items())),
    )


def _again(session: Session, stale: Sequence[KeptFit], kept: Sequence[KeptFit]) -> list[Refit]:
    """Do the fits of one request again; slices that had no fit among those kept get theirs too."""
    first = stale[0]
    if "function" in first.settings:
        reason = f"its model {first.model} is a function of one's own: fit it again from Python"
        return [Refit(fit, None, reason) for fit in stale]
    request = FitRequest(
        first.model,
        first.observable,
        first.along,
        first.background,
        **{name: first.settings[name] for name in FitRequest.__dataclass_fields__ if name in first.settings},
    )
    try:
        scan = find_scan(session, first.scan_id)
        _, parts = fit_slices(scan, request)
    except NightfoldError as problem:
        return [Refit(fit, None, str(problem.args[0])) for fit in stale]
    now = {slice_text(part.where): part for part in parts}
    wanted = [slice_text(fit.slice) for fit in stale]
    fitted = {slice_text(fit.slice) for fit in kept if _same_fit(fit, first)}
    there = [where for where in now if where in wanted]
    fresh = [where for where in now if there and where not in fitted]
    with session.writing() as connection:
        for where in (*there, *fresh):
            keep_fit(connection, scan, request, now[where])
    after = {slice_text(fit.slice): fit for fit in list_fits(session, scan) if _same_fit(fit, first)}
    return [
        *(
            Refit(fit, after[where]) if where in there else Refit(fit, None, _no_slice(scan, fit, now))
            for fit, where in zip(stale, wanted, strict=True)
        ),
        *(Refit(None, after[where]) for where in fresh),
    ]


def _same_fit(one: KeptFit, other: KeptFit) -> bool:
    """Whether two fits differ in their slices and settings only, so that one could replace the other."""
    return (one.scan_id, one.observable, one.along, one.model, one.background) == (
        other.scan_id, other.observable, other.along, other.model, other.background,
    ) and ("relative_to" in one.settings) == ("relative_to" in other.settings)  # fmt: skip


def _no_slice(scan: Scan, fit: KeptFit, now: Sequence[str] | dict[str, Any]) -> str:
    if not fit.slice:
        return f"scan {scan.key} has several axes now, {len(now)} slices: fit it again with 'along'"
    where = ", ".join(f"{name} {value}" for name, value in fit.slice.items())
    return f"scan {scan.key} has no slice {where} any more"
