"""Other minima, far from the one reported, that the data allow nearly as well."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.robust import follow
from nightfold.fits.engine.solver import expand, solve
from nightfold.fits.engine.variance import Laws
from nightfold.fits.engine.warning import FitWarning, figure, per_unit

TOLERANCE, STEPS = 1e-6, 30
LEAST_ODDS = 1.0
"""Logarithm of the odds against another minimum from which on it does not matter."""
APART = 3.0
"""Stderr from which on another minimum is another answer."""


@dataclass(frozen=True)
class Rivals:
    """The best other minimum of B data sets: ``q`` (B, R) of it, nan where there is none, ``odds`` (B,) against it.

    ``odds`` is the logarithm of the ratio of likelihoods.
    """

    q: Floats
    odds: Floats


def find_rivals(
    layout: Layout, points: Points, theta: Floats, origin: Ints, starts: Floats, laws: Laws
) -> Rivals:
    """Return the best minimum that distant starts lead to.

    Parameters
    ----------
    points : Points
        B data sets, outliers left out.
    theta : (B, P) float array
        The fit reported.
    origin : (M,) int array
        The data set of each start.
    starts : (M, P) float array
    laws : Laws
        Variance laws of which each minimum has the likeliest.
    """
    count = len(theta)
    rivals = Rivals(np.full((count, len(layout.all_names)), np.nan), np.full(count, np.inf))
    far = ~layout.shape.near(starts, theta[origin])
    origin, starts = origin[far], starts[far]
    if not len(origin):
        return rivals
    flat = points.weighted(np.where(points.used, 1.0, 0.0))
    minima = solve(layout, flat.take(origin), starts, TOLERANCE, STEPS)
    good = np.isfinite(minima.sse) & ~minima.bound.any(axis=1)
    good &= ~layout.shape.near(minima.theta, theta[origin])
    origin, starts = origin[good], minima.theta[good]
    if not len(origin):
        return rivals
    sets = np.unique(origin)
    each = np.concatenate([sets, origin])
    some = points.take(each)
    found = follow(layout, some, np.concatenate([theta[sets], starts]), some.used, laws)
    mine, other = found.likelihood[: len(sets)], found.take(np.arange(len(sets), len(each)))
    odds = mine[np.searchsorted(sets, origin)] - other.likelihood
    odds = np.where(layout.shape.near(other.theta, theta[origin]) | np.isnan(odds), np.inf, odds)
    order = np.lexsort((odds, origin))
    rows = order[np.unique(origin[order], return_index=True)[1]]
    there = flat.take(origin[rows])
    c = expand(layout, there, other.theta[rows]).c
    rivals.odds[sets] = odds[rows]
    rivals.q[sets] = layout.report(other.theta[rows], c, there.frame)[0]
    return rivals


@dataclass(frozen=True)
class Rival:
    """Another minimum of one data set: ``odds`` is how many times as likely the one reported is.

    ``value`` has, by name, what is another answer there; ``roles`` say which of them is a position, width, rate or
    frequency.
    """

    odds: float
    value: dict[str, float]
    roles: dict[str, str]


def ambiguous(found: Rival | None, value: dict[str, float], unit: str) -> FitWarning | None:
    """Return what is to be said of it, ``value`` being those reported."""
    if found is None:
        return None
    per = {n for n, role in found.roles.items() if role == "frequency" or n.endswith("rate")}
    pairs = [
        " or ".join((per_unit if name in per else figure)(v, unit) for v in (value[name], other))
        for name, other in found.value.items()
    ]
    said = " and ".join(f"a {name} of {pair}" for name, pair in zip(found.value, pairs, strict=True))
    advice = "take more shots, closer together, or give start values"
    for name, other in found.value.items():
        if found.roles[name] == "position":
            places = f"{figure(value[name], unit)} and {figure(other, unit)}"
            advice = f"take more shots around {places}, or give start values"
    return FitWarning(
        "ambiguous",
        f"two answers fit nearly as well (odds {found.odds:.2g} to 1): {said}; {advice}",
    )
