"""The full recipe on a batch of data sets: outliers left out, the fit averaged over variance laws."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.batched import combine, diagonal
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.members import Members, fit_laws
from nightfold.fits.engine.mixture import Averaged
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.robust import TRIED, TRIED_STATED, candidates, confirm, follow
from nightfold.fits.engine.solver import Solution, expand
from nightfold.fits.engine.uncertainty import from_coordinates
from nightfold.fits.engine.variance import EQUAL, LEARNT, STATED, WITH_STATED, Laws
from nightfold.fits.request import Request

MOST_MINIMA = 3
EDGE_LOSS = 3.0
"""A minimum at the edge of what is searched is taken for another one if its likelihood is e^3 times larger."""
SAME = 1e-4
"""Minima whose sums of squares agree to this share are the same one."""


@dataclass(frozen=True)
class Refined:
    """What the recipe found, B data sets; names as in `fitting.Outcome`, points in the order of the batch."""

    value: Floats
    stderr: Floats
    spread: Floats
    covariance: Floats
    dof: Floats
    variance: Floats
    converged: Bools
    bound: Bools
    unlike: Floats
    mixture: Averaged
    outlier: Bools
    deviation: Floats
    theta: Floats
    shared: Floats


def choose_laws(request: Request, stated: bool) -> Laws:
    """Return the variance laws that the estimates are averaged over."""
    if request.weighted:
        return STATED
    if request.weights == "equal":
        return EQUAL
    return WITH_STATED if stated else LEARNT


@dataclass(frozen=True)
class Hidden:
    """Minima with far points brought nearer: ``origin`` (M,) whose each is, ``near`` (M, n) the points not moved."""

    minima: Solution
    origin: Ints
    near: Bools


def refine(
    request: Request,
    points: Points,
    minima: Solution,
    origin: Ints,
    hidden: Hidden | None = None,
    shared: Floats | None = None,
) -> Refined:
    """Return the full fit of each data set.

    Parameters
    ----------
    points : Points
        B data sets.
    minima : Solution
        Minima of the sum of squares, M rows.
    origin : (M,) int array
        The data set of each.
    hidden : Hidden, optional
        Further minima to follow in the search for outliers.
    shared : (B, n, m) float array, optional
        Change of the points, in the frame, with each error that they share.
    """
    layout = request.layout
    order = _distinct(minima, origin, MOST_MINIMA if request.robust else 1)
    origin, theta, converged = origin[order], minima.theta[order], minima.converged[order]
    out, members = np.zeros(points.v.shape, dtype=bool), None
    stated = points.stated is not None
    laws = choose_laws(request, stated)
    learning = WITH_STATED if stated else LEARNT
    if request.robust:
        near = points.used[origin]
        if hidden is not None:
            order = _distinct(hidden.minima, hidden.origin, MOST_MINIMA)
            origin = np.append(origin, hidden.origin[order])
            theta = np.concatenate([theta, hidden.minima.theta[order]])
            converged = np.append(converged, hidden.minima.converged[order])
            near = np.concatenate([near, hidden.near[order]])
        found = follow(layout, points.take(origin), theta, near, TRIED_STATED if stated else TRIED)
        at_edge = _at_edge(layout, points, origin, found.theta).any(axis=1)
        best = _first_of(origin, np.where(at_edge, EDGE_LOSS, 0.0) - found.likelihood)
        theta, curve, converged = found.theta[best], found.curve[best], converged[best]
        out = candidates(layout, points, found.z[best])
        out, members = _confirmed(layout, points, out, curve, theta, learning)
    else:
        curve = _curve(layout, points, theta)
    rest = points.without(out)
    if members is None or laws is not learning or shared is not None:
        exact = len(laws) == 1
        members = fit_laws(
            layout, rest, curve, theta, laws, absolute=request.absolute, exact=exact, shared=shared
        )
    return _summarise(request, rest, members, out, converged)


def _at_edge(layout: Layout, points: Points, origin: Ints, theta: Floats) -> Bools:
    """Return which coordinates (M, P) ended at the edge of what is searched."""
    size = (len(points.v), theta.shape[1])
    low, high = (np.broadcast_to(end, size)[origin] for end in (points.data.low, points.data.high))
    return ((theta <= low) | (theta >= high)) & ~layout.rightful(theta, low, high)


def _distinct(minima: Solution, origin: Ints, most: int) -> Ints:
    """Return the best distinct minima of each data set, at most so many, sorted by data set."""
    sse = np.where(np.isnan(minima.sse), np.inf, minima.sse)
    order = np.lexsort((np.arange(len(origin)), sse, origin))
    sets, height = origin[order], sse[order]
    fresh = np.ones(len(order), dtype=bool)
    fresh[1:] = (sets[1:] != sets[:-1]) | (height[1:] > height[:-1] * (1 + SAME))
    order, sets = order[fresh], sets[fresh]
    rank = np.arange(len(sets)) - np.searchsorted(sets, sets)
    return order[rank < most]


def _first_of(origin: Ints, height: Floats) -> Ints:
    """Return the row of least height of each data set."""
    order = np.lexsort((np.arange(len(origin)), height, origin))
    _, first = np.unique(origin[order], return_index=True)
    return order[first]


def _curve(layout: Layout, points: Points, theta: Floats) -> Floats:
    """Return the curve with equal weights at every point, counted from where y is zero."""
    about = expand(layout, points.weighted(np.where(points.used, 1.0, 0.0)), theta)
    columns = layout.columns(points.data.u, theta, points.data.shift)
    return np.asarray(combine(about.c, columns) + points.origin)


def _confirmed(
    layout: Layout, points: Points, out: Bools, curve: Floats, theta: Floats, laws: Laws
) -> tuple[Bools, Members | None]:
    """Return which candidates are outliers by fits that have not seen them, and these fits if none is taken back."""
    rows = np.flatnonzero(out.any(axis=1))
    if not len(rows):
        return out, None
    some = points.take(rows)
    members = fit_laws(layout, some.without(out[rows]), curve[rows], theta[rows], laws)
    found = confirm(layout, some, members, out[rows])
    whole = len(rows) == len(out) and np.array_equal(found, out)
    out[rows] = found
    return out, members if whole else None


def _summarise(request: Request, points: Points, members: Members, out: Bools, converged: Bools) -> Refined:
    layout, frame = request.layout, points.data.frame
    weight = members.weight
    q, covariance = _moments(members)
    for row, parameter in enumerate(layout.parameters):
        if parameter.unit == "rad":
            turn = 2 * np.pi * np.ceil((q[:, row] - np.pi) / (2 * np.pi))
            q[:, row] -= turn
            members.q[:, :, row] -= turn[:, None]
    fixed, free_rows = layout.fixed_rows, layout.free_rows
    variance = diagonal(covariance)
    spread = np.where(np.isfinite(variance), np.sqrt(np.maximum(variance, 0.0)), np.inf)
    spread = np.where(fixed, 0.0, spread)
    value, slopes = from_coordinates(q, spread, layout.links)
    stderr = np.where(fixed, 0.0, spread * np.abs(slopes))
    covariance = (covariance * slopes[:, :, None] * slopes[:, None])[:, free_rows][:, :, free_rows]
    count = np.count_nonzero(points.used, axis=1)
    dof = np.full(len(q), np.inf) if request.absolute else (count - layout.free_count).astype(np.float64)
    scale = np.einsum("bk,bk->b", weight, members.scale)
    bound = np.einsum("bk,bkp->bp", weight, members.bound) > 0.5
    theta = members.theta[np.arange(len(weight)), weight.argmax(axis=1)]
    theirs = np.einsum("bk,bkr->br", weight, np.where((weight > 0)[:, :, None], members.shared, 0.0))
    deviation = np.where(points.used, np.sqrt(members.point_variance) * frame.ys[:, None], np.nan)
    return Refined(
        value,
        np.where(np.isnan(stderr), np.inf, stderr),
        spread,
        covariance,
        dof,
        scale * frame.ys**2,
        converged & (np.einsum("bk,bk->b", weight, members.converged) > 0.9),
        bound & ~layout.rightful(theta, points.data.low, points.data.high),
        _unlike(points, members, q, fixed),
        Averaged(members.q, members.spread, weight),
        out,
        deviation,
        theta,
        np.sqrt(theirs) * np.abs(slopes),
    )


def _moments(members: Members) -> tuple[Floats, Floats]:
    """Return mean (B, R) and covariance (B, R, R) of the coordinates."""
    some = (members.weight > 0)[:, :, None]
    q = np.einsum("bk,bkr->br", members.weight, np.where(some, members.q, 0.0))
    centered = np.where(some, members.q - q[:, None], 0.0)
    own = np.where(some[..., None], members.covariance, 0.0)
    between = np.einsum("bk,bkr,bks->brs", members.weight, centered, centered)
    return q, np.einsum("bk,bkrs->brs", members.weight, own) + between


def _unlike(points: Points, members: Members, q: Floats, fixed: Bools) -> Floats:
    """Return how far equal weights lead from the average, in units of the stderr that they have by all laws."""
    if members.q.shape[1] == 1:
        return np.zeros_like(q)
    plain = members.variance[:, 0]
    law = members.point_variance / (members.scale[:, :1] * plain)
    used = points.used
    share = np.where(used, law, 0.0).sum(axis=1) / np.maximum(np.count_nonzero(used, axis=1), 1)
    spread = members.spread[:, 0] * np.sqrt(share)[:, None]
    far = np.abs(members.q[:, 0] - q) / spread
    return np.where(fixed | ~np.isfinite(far), 0.0, far)
