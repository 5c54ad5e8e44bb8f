"""Figures of fits, for papers and logbooks: the only part that knows matplotlib.

The names below are imported when first used; matplotlib is loaded by them alone.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from nightfold.figures.fitfigure import fit_figure
    from nightfold.figures.saving import save_figure
    from nightfold.figures.slicefigure import slices_figure

_HOMES = {"fit_figure": "fitfigure", "save_figure": "saving", "slices_figure": "slicefigure"}

__all__ = ["fit_figure", "save_figure", "slices_figure"]


def __getattr__(name: str) -> Any:
    """Import a public name on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module 'nightfold.figures' has no attribute {name!r}")
    value = getattr(import_module(f"nightfold.figures.{_HOMES[name]}"), name)
    globals()[name] = value
    return value
