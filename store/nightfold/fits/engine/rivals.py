"""Other minima, far from the one reported, that the data allow nearly as well."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.solver import expand, solve
from nightfold.fits.engine.tangent import Tangent
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
    layout: Layout, data: DataSets, about: Tangent, theta: Floats, origin: Ints, starts: Floats
) -> Rivals:
    """Return the best minimum that distant starts lead to, under the scatter of the fit reported.

    Parameters
    ----------
    theta : (B, P) float array
        The fit reported.
    origin : (M,) int array
        The data set of each start.
    starts : (M, P) float array
    """
    count = len(theta)
    rivals = Rivals(np.full((count, len(layout.all_names)), np.nan), np.full(count, np.inf))
    far = ~layout.shape.near(starts, theta[origin]) if len(starts) else np.zeros(0, dtype=bool)
    origin, starts = origin[far], starts[far]
    if not len(origin):
        return rivals
    values = data.z if data.root_weights is None else data.z / data.root_weights
    sets = replace(data, root_weights=about.roots, z=values * about.roots).take(origin)
    found = solve(layout, sets, starts, TOLERANCE, STEPS)
    good = np.isfinite(found.sse) & ~found.bound.any(axis=1) & ~layout.shape.near(found.theta, theta[origin])
    best = np.einsum("bn,bn->b", about.residual, about.residual)
    used = np.count_nonzero(about.roots > 0, axis=1)
    odds = 0.5 * used[origin] * np.log(found.sse / np.maximum(best[origin], 1e-300))
    odds = np.where(good, odds, np.inf)
    order = np.lexsort((odds, origin))
    which, first = np.unique(origin[order], return_index=True)
    rows = order[first]
    rivals.odds[which] = odds[rows]
    there = sets.take(rows)
    c = expand(layout, there, found.theta[rows]).c
    rivals.q[which] = layout.report(found.theta[rows], c, there.frame)[0]
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
