"""nightfold: every shot of a cold-atom machine, folded into scans, fitted with uncertainties that cover.

The names below are the public face; they are imported when first used, so that
``import nightfold`` and ``nightfold --help`` stay instant.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from nightfold.version import __version__ as __version__

if TYPE_CHECKING:
    from nightfold.fits.curve import fit_curve
    from nightfold.fits.many import FitTable, fit_many
    from nightfold.fits.model import Model
    from nightfold.fits.result import Estimate, FitResult, FitWarning
    from nightfold.ledger.outcome import Intake
    from nightfold.opening import open_store
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

_HOMES = {
    "Estimate": "nightfold.fits.result",
    "FitResult": "nightfold.fits.result",
    "FitTable": "nightfold.fits.many",
    "FitWarning": "nightfold.fits.result",
    "Intake": "nightfold.ledger.outcome",
    "Model": "nightfold.fits.model",
    "Scan": "nightfold.scans.scan",
    "Store": "nightfold.store",
    "fit_curve": "nightfold.fits.curve",
    "fit_many": "nightfold.fits.many",
    "open_store": "nightfold.opening",
}

__all__ = [
    "Estimate",
    "FitResult",
    "FitTable",
    "FitWarning",
    "Intake",
    "Model",
    "Scan",
    "Store",
    "fit_curve",
    "fit_many",
    "open_store",
]


def __getattr__(name: str) -> Any:
    """Import a public name on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module 'nightfold' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """Return the public names and the dunder ones."""
    return sorted([*globals(), *__all__])
