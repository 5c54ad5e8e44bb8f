"""Derivatives of a function whose formula is not known, and which of its parameters it is linear in."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from nightfold.fits.engine.arrays import Floats

Function = Callable[[Floats], Floats]
"""Values (n,) of a model at parameters (k,)."""

WANTED_CHANGE = 1e-3
"""A step moves the model by about this share of its size: truncation (fourth order) and rounding then both
stay near 1e-12."""


def derivative(function: Function, at: Floats, j: int, step: float) -> Floats:
    """Return the derivative for parameter j by central differences of fourth order, (n,)."""
    values = []
    for k in (-2, -1, 1, 2):
        moved = at.copy()
        moved[j] += k * step
        values.append((moved[j] - at[j], function(moved)))
    (_, f2m), (h1m, f1m), (h1, f1), (h2, f2) = values
    first = (f1 - f1m) / (h1 - h1m)
    second = (f2 - f2m) / (h2 - values[0][0])
    return np.asarray((4.0 * first - second) / 3.0)


def suitable_step(function: Function, at: Floats, j: int, guess: float, low: float, high: float) -> float:
    """Return a step of parameter j that moves the model by about a thousandth of its size.

    Relative steps fail where a parameter has a large offset (a line at 384 THz) or is zero; the change of the
    model tells the scale. Steps stay inside the bounds, two of them to either side.
    """
    here = function(at)
    size = float(np.max(np.abs(here))) if np.isfinite(here).all() else 1.0
    room = min(at[j] - low, high - at[j]) / 2.5
    step = guess
    for _ in range(60):
        step = min(step, room) if room > 0 else step
        moved = at.copy()
        moved[j] += step
        change = float(np.max(np.abs(function(moved) - here))) if size > 0 else 0.0
        if not np.isfinite(change) or change > 10 * WANTED_CHANGE * size:
            step /= 8.0
        elif change < WANTED_CHANGE * size / 30 and step < 1e6 * max(abs(at[j]), 1.0) and step < room:
            step *= 8.0
        else:
            break
    return step


def linear_parameters(function: Function, at: Floats, candidates: list[int]) -> list[int]:
    """Return which of the candidates the function is jointly linear in (affine), tried at several values."""
    chosen: list[int] = []
    with np.errstate(all="ignore"):
        for j in candidates:
            if _is_affine(function, at, j, chosen):
                chosen.append(j)
    return chosen


def _is_affine(function: Function, at: Floats, j: int, chosen: list[int]) -> bool:
    """Return whether f is affine in j with a slope that the chosen ones do not change."""
    slopes = []
    for level in (0.0, 3.0, -700.0):
        base = at.copy()
        base[chosen] = level
        values = {}
        for c in (0.0, 1.0, -2.0, 1e-3, 1e3, 1e6):
            base[j] = c
            values[c] = function(base)
        origin, slope = values[0.0], values[1.0] - values[0.0]
        if not np.isfinite(list(values.values())).all() or not np.any(slope != 0.0):
            return False
        large, level_size = float(np.max(np.abs(slope))), float(np.max(np.abs(origin)))
        for c, found in values.items():
            tolerance = 1e-9 * abs(c) * large + (1e-12 + 4e-15 * abs(c)) * level_size
            if np.max(np.abs(found - origin - c * slope)) > tolerance:
                return False
        slopes.append(slope)
        if np.max(np.abs(slope - slopes[0])) > 1e-9 * large + 1e-12 * level_size:
            return False
        if not chosen:
            return True
    return True
