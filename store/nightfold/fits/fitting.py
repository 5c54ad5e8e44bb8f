"""One pass over any number of data sets: group, place starts, solve, report."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.data import DataSets, stack
from nightfold.fits.engine.mixture import Averaged
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.solver import Solution, solve
from nightfold.fits.engine.uncertainty import report
from nightfold.fits.groups import BATCH_POINTS, Group, make_group, patterns
from nightfold.fits.recipe import choose_laws, refine
from nightfold.fits.request import Request

FULL_POINTS = 4000
"""The full recipe takes smaller batches: each data set becomes one a variance law."""
START_TOLERANCE = 1e-6
"""In the full recipe the first descents stop when a step promises this share of the sum of squares."""


@dataclass(frozen=True)
class Outcome:
    """Everything a pass found, one row a data set (nan where one had too few points).

    Names and shapes as in `engine.uncertainty.Reported`; ``low``, ``high`` are the ends of x, ``count`` the
    points used, ``distinct`` the distinct x among them, ``bound`` (B, P) which coordinates ended at a bound.

    Of the points handed in, (B, n), ``outlier`` tells which the robust step left out, ``deviation`` is the standard
    deviation of a point about the curve, nan for those not used. ``mixture`` has what is known under each variance law,
    and ``unlike`` (B, R) how far the estimate with equal weights lies from the average, in units of its own stderr.
    ``theta`` (B, P) are the coordinates of the fit in the frame, by the law that counts most.
    """

    request: Request
    value: Floats
    stderr: Floats
    spread: Floats
    covariance: Floats
    dof: Floats
    variance: Floats
    count: Ints
    distinct: Ints
    low: Floats
    high: Floats
    converged: Bools
    bound: Bools
    constant: Bools
    groups: tuple[Group, ...]
    outlier: Bools
    deviation: Floats
    unlike: Floats
    theta: Floats
    mixture: Averaged
    errors: Floats | None = None

    def used(self, x: Floats, y: Floats, row: int) -> Bools:
        """Return which of the points handed in a data set was fitted to, (n,)."""
        keep = np.isfinite(x) & np.isfinite(y)
        if self.errors is not None:
            keep &= np.isfinite(self.errors if self.errors.ndim == 1 else self.errors[row])
        return np.asarray(keep & ~self.outlier[row])

    def shortage(self, row: int) -> str:
        """Return in words why a data set had too few points."""
        count, distinct, layout = int(self.count[row]), int(self.distinct[row]), self.request.layout
        found = f"{count} point{'' if count == 1 else 's'}"
        if count >= max(layout.free_count, 2):
            found = f"{distinct} distinct value{'' if distinct == 1 else 's'} of x"
        free = layout.free_count
        wanted = f"{layout.shape.name} has {free} free parameter{'' if free == 1 else 's'}"
        return f"{found}, but {wanted}; fix one or add shots"

    @property
    def _parameters(self) -> Floats:
        """Values without the derived numbers."""
        return self.value[:, : len(self.request.layout.names)]

    @cached_property
    def feature_p(self) -> Floats:
        """The p value of "nothing but background" of each data set, worked out when first asked for."""
        p = np.zeros(len(self.value))
        for group in self.groups:
            lost = self.outlier[group.rows].any(axis=1)
            if not lost.all():
                p[group.rows] = group.feature_p(self._parameters[group.rows])
            for row in np.flatnonzero(lost):
                place = group.rows[row]
                left = ~self.outlier[place][group.place[row]]
                p[place] = group.part(int(row), left).feature_p(self._parameters[place][None])[0]
        return p


def fit_sets(request: Request, x: Floats, Y: Floats, stderr: Floats | None, full: bool = False) -> Outcome:
    """Return the fits of data sets that share x.

    Parameters
    ----------
    x : (n,) float array
    Y : (B, n) float array
        Points that are nan in x, Y or (when used) stderr are left out.
    stderr : (n,) or (B, n) float array or None
    full : bool
        Look for outliers and average over variance laws, as the request has it; otherwise neither.
    """
    with np.errstate(all="ignore"):
        return _fit_sets(request, x, Y, stderr, full and request.elaborate)


def _fit_sets(request: Request, x: Floats, Y: Floats, stderr: Floats | None, full: bool) -> Outcome:
    laws = len(choose_laws(request, stderr is not None)) if full else 1
    outcome = _empty_outcome(request, Y.shape, laws)
    solve_batch = _solve_fully if full else _solve_batch
    groups: list[Group] = []
    waiting: list[Group] = []
    for rows, keep, errors in patterns(x, Y, stderr if request.weighted else None):
        count, distinct = int(keep.sum()), len(np.unique(x[keep]))
        outcome.count[rows], outcome.distinct[rows] = count, distinct
        if min(count, distinct) < request.layout.free_count or distinct < 2:
            continue
        where = np.ix_(rows, keep)
        stated = np.broadcast_to(stderr, Y.shape)[where] if full and stderr is not None else None
        group = make_group(request, rows, x[keep], Y[where], errors, stated)
        group = replace(group, place=np.flatnonzero(keep)[group.place])
        outcome.low[rows], outcome.high[rows] = x[keep].min(), x[keep].max()
        outcome.constant[rows] = np.ptp(Y[np.ix_(rows, keep)], axis=1) == 0
        groups.append(group)
        waiting.append(group)
        if sum(g.data.z.size for g in waiting) > (FULL_POINTS if full else BATCH_POINTS):
            solve_batch(request, waiting, outcome)
            waiting = []
    if waiting:
        solve_batch(request, waiting, outcome)
    for name, value in request.fixed.items():
        outcome.value[outcome.count > 0, request.layout.names.index(name)] = value
    return replace(outcome, groups=tuple(groups), errors=stderr if request.weighted else None)


def _empty_outcome(request: Request, shape: tuple[int, ...], laws: int) -> Outcome:
    names, free, size = len(request.layout.all_names), len(request.layout.free_names), shape[0]
    blank = np.full((size, names), np.nan)
    return Outcome(
        request,
        blank,
        blank.copy(),
        blank.copy(),
        np.full((size, free, free), np.nan),
        np.zeros(size),
        np.full(size, np.nan),
        np.zeros(size, dtype=np.intp),
        np.zeros(size, dtype=np.intp),
        np.full(size, np.nan),
        np.full(size, np.nan),
        np.zeros(size, dtype=bool),
        np.zeros((size, len(request.layout.shape.theta)), dtype=bool),
        np.zeros(size, dtype=bool),
        (),
        np.zeros(shape, dtype=bool),
        np.full(shape, np.nan),
        np.zeros((size, names)),
        np.full((size, len(request.layout.shape.theta)), np.nan),
        Averaged.blank(size, laws, names),
    )


def _solve_batch(request: Request, groups: list[Group], outcome: Outcome) -> None:
    layout = request.layout
    data = stack([group.data for group in groups])
    rows = np.concatenate([group.rows for group in groups])
    solution = _best(request, data, *_gather([group.starts() for group in groups], groups))
    if layout.shape.numeric and layout.free_theta.any():
        solution = _follow_rivals(request, data, groups, solution)
    given = np.concatenate([g.weight_one for g in groups]) ** 2 if request.absolute else None
    reported = report(layout, data, solution.theta, given)
    for name in ("value", "stderr", "spread", "covariance", "dof", "variance"):
        getattr(outcome, name)[rows] = getattr(reported, name)
    outcome.mixture.q[rows, 0], outcome.mixture.spread[rows, 0] = reported.q, reported.spread
    outcome.mixture.weight[rows] = 1.0
    outcome.converged[rows], outcome.theta[rows] = solution.converged, solution.theta
    outcome.bound[rows] = solution.bound & ~layout.rightful(solution.theta, data.low, data.high)


def _solve_fully(request: Request, groups: list[Group], outcome: Outcome) -> None:
    layout = request.layout
    data = stack([group.data for group in groups])
    rows = np.concatenate([group.rows for group in groups])
    points, place = _gather_points(data, groups)
    if layout.shape.searchable:
        starts = [group.starts() for group in groups]
        origin, theta = _gather(starts, groups)
        if request.robust:
            far, other = _gather(
                [group.far_starts(*found) for group, found in zip(groups, starts, strict=True)], groups
            )
            origin, theta = np.concatenate([origin, far]), np.concatenate([theta, other])
        minima = solve(layout, data.take(origin), _with_fixed(request, data, origin, theta), START_TOLERANCE)
    else:
        minima = _best(request, data, *_gather([group.starts() for group in groups], groups))
        minima = _follow_rivals(request, data, groups, minima)
        origin = np.arange(len(data.z))
    found = refine(request, points, minima, origin)
    for name in (
        "value",
        "stderr",
        "spread",
        "covariance",
        "dof",
        "variance",
        "converged",
        "bound",
        "unlike",
        "theta",
    ):
        getattr(outcome, name)[rows] = getattr(found, name)
    for name in ("q", "spread", "weight"):
        getattr(outcome.mixture, name)[rows] = getattr(found.mixture, name)
    outcome.count[rows] -= np.count_nonzero(found.outlier, axis=1)
    real = place >= 0
    at = np.broadcast_to(rows[:, None], place.shape)[real], place[real]
    outcome.outlier[at], outcome.deviation[at] = found.outlier[real], found.deviation[real]


def _gather_points(data: DataSets, groups: list[Group]) -> tuple[Points, Ints]:
    """Return the points of a batch without their weights, and their places among those handed in, -1 for padding."""
    shape = data.z.shape
    roots = np.ones((1, 1)) if data.root_weights is None else data.root_weights
    used = np.broadcast_to(roots > 0, shape)
    place = np.full(shape, -1, dtype=np.intp)
    stated = None if groups[0].stated is None else np.ones(shape)
    first = 0
    for group in groups:
        part = slice(first, first + len(group.rows)), slice(0, group.place.shape[1])
        place[part] = group.place
        if stated is not None and group.stated is not None:
            stated[part] = group.stated**2
        first += len(group.rows)
    return Points(data, np.where(used, data.z / np.where(roots > 0, roots, 1.0), 0.0), used, stated), place


def _with_fixed(request: Request, data: DataSets, origin: Ints, theta: Floats) -> Floats:
    held = request.layout.fixed_theta(request.fixed, data.frame)[origin]
    return np.where(np.isfinite(held), held, theta)


def _best(request: Request, data: DataSets, origin: Ints, theta: Floats) -> Solution:
    """Return the best minimum of each data set, the first among equals; `origin` tells whose each start is."""
    theta = _with_fixed(request, data, origin, theta)
    if len(origin) == len(data.z):
        return solve(request.layout, data, theta)
    solution = solve(request.layout, data.take(origin), theta)
    order = np.lexsort((np.arange(len(origin)), solution.sse, origin))
    _, first = np.unique(origin[order], return_index=True)
    return solution.take(order[first])


def _follow_rivals(request: Request, data: DataSets, groups: list[Group], found: Solution) -> Solution:
    """Return the lower minima that other scales of a given start lead to, where there are such."""
    ends = np.cumsum([len(group.rows) for group in groups])[:-1]
    parts = zip(groups, np.split(found.sse, ends), np.split(found.converged, ends), strict=True)
    origin, theta = _gather([group.rivals(sse, converged) for group, sse, converged in parts], groups)
    if not len(origin):
        return found
    sets, which = np.unique(origin, return_inverse=True)
    other = _best(request, data.take(sets), which, theta)
    lower = other.converged & (other.sse < found.sse[sets])
    every = np.arange(len(found.sse))
    every[sets[lower]] = len(every) + np.flatnonzero(lower)
    return found.join(other).take(every)


def _gather(starts: list[tuple[Ints, Floats]], groups: list[Group]) -> tuple[Ints, Floats]:
    """Return data set (within the batch) and theta of every start of every group."""
    first = np.cumsum([0] + [len(group.rows) for group in groups])
    sets = [which + base for (which, _), base in zip(starts, first, strict=False)]
    return np.concatenate(sets), np.concatenate([theta for _, theta in starts])
