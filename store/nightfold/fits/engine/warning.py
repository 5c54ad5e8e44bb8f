"""What a warning is, and how its figures are written."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class FitWarning:
    """Something to know about a fit.

    Attributes
    ----------
    code : str
        Short name, stable across versions (``no-feature``).
    message : str
        A plain sentence with the figures and what to do next.
    advisory : bool
        Whether the numbers can be trusted all the same.
    """

    code: str
    message: str
    advisory: bool = False


def with_unit(value: float, unit: str, digits: int = 4) -> str:
    """Return a number with its unit."""
    return f"{value:.{digits}g} {unit}".rstrip()


def figure(value: float, unit: str) -> str:
    """Return a place with its unit."""
    return with_unit(value, unit, 6)


def per_unit(value: float, unit: str) -> str:
    """Return a rate or a frequency."""
    return f"{value:.4g}/{unit}" if unit else f"{value:.4g}"


def chance(p: float) -> str:
    """Return a small probability in words."""
    return f"{100 * p:.2g} %" if p >= 1e-4 else "less than 0.01 %"
