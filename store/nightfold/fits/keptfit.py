"""A fit as it was kept, and its numbers."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from nightfold.errors import FitError
from nightfold.fits.result import FitWarning

LEVEL_68 = 0.6827
LEVEL_95 = 0.95


@dataclass(frozen=True)
class KeptEstimate:
    """One number of a kept fit, with the two intervals that are kept."""

    value: float
    stderr: float
    unit: str
    interval68: tuple[float, float]
    interval95: tuple[float, float]
    fixed: bool

    def interval(self, level: float) -> tuple[float, float]:
        """Return the interval kept for 68.27 % or 95 %.

        Raises
        ------
        FitError
            For any other level: fit again to have it.
        """
        for kept, limits in ((LEVEL_68, self.interval68), (LEVEL_95, self.interval95)):
            if abs(level - kept) < 1e-3:
                return limits
        raise FitError(
            f"interval: found level {level:g}; a kept fit has {LEVEL_68} and {LEVEL_95}, fit again for others"
        )


@dataclass(frozen=True)
class KeptFit:
    """A fit as it was kept.

    Attributes
    ----------
    id : int
    at : datetime
        When it was done (UTC).
    scan_id : int
    scan_key, model, background, observable, along : str
    slice : dict
        Values of the other axes.
    estimates : dict of str to KeptEstimate
    trusted : bool
    warnings : tuple of FitWarning
    shots, set_aside : int
        Shots used, and left out.
    settings : dict
        What it takes to fit again; for a model of one's own a fingerprint of its ``function`` too, and the version of
        each of the card's ``derived`` quantities that went in.
    stale : bool
        Whether the scan's data have changed since.
    version : str
        The nightfold that did it.
    replaces : int or None
        The earlier fit that this one replaced.
    shared_stderr : dict of str to float
        Of a fit relative to reference shots: the part of each stderr that is due to these.
    """

    id: int
    at: datetime
    scan_id: int
    scan_key: str
    model: str
    background: str
    observable: str
    along: str
    slice: dict[str, Any]
    estimates: dict[str, KeptEstimate]
    trusted: bool
    warnings: tuple[FitWarning, ...]
    shots: int
    set_aside: int
    settings: dict[str, Any]
    stale: bool
    version: str
    replaces: int | None
    shared_stderr: dict[str, float] = field(default_factory=dict)
