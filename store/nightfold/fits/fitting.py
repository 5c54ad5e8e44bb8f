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
from nightfold.fits.recipe import Hidden, choose_laws, refine
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
    ``theta`` (B, P) are the coordinates of the fit in the frame, by the law that counts most. ``shared`` (B, R) is
    the part of stderr due to errors that points share, nan where not all are known; None where none are stated.
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
    shared: Floats | None = None

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


def fit_sets(
    request: Request,
    x: Floats,
    Y: Floats,
    stderr: Floats | None,
    full: bool = False,
    shared: Floats | None = None,
) -> Outcome:
    """Return the fits of data sets that share x.

    Parameters
    ----------
    x : (n,) float array
    Y : (B, n) float array
        Points that are nan in x, Y or (when used) stderr are left out.
    stderr : (n,) or (B, n) float array or None
    full : bool
        Look for outliers and average over variance laws, as the request has it; otherwise neither.
    shared : (n, m) or (B, n, m) float array or None
        Change of the points with each error that they share; nan, not known, counts as nothing.
    """
    with np.errstate(all="ignore"):
        if shared is None:
            return _fit_sets(request, x, Y, stderr, full and request.elaborate, None)
        outcome = _fit_sets(request, x, Y, stderr, full and request.elaborate, np.nan_to_num(shared))
        unknown = (np.isnan(shared).any(axis=-1) & np.isfinite(Y) & np.isfinite(x)).any(axis=1)
        if outcome.shared is not None:
            outcome.shared[unknown] = np.nan
        return outcome


def _fit_sets(
    request: Request, x: Floats, Y: Floats, stderr: Floats | None, full: bool, shared: Floats | None
) -> Outcome:
    laws = len(choose_laws(request, stderr is not None)) if full else 1
    outcome = _empty_outcome(request, Y.shape, laws)
    if shared is not None:
        outcome = replace(outcome, shared=np.full_like(outcome.stderr, np.nan))
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
            solve_batch(request, waiting, outcome, shared)
            waiting = []
    if waiting:
        solve_batch(request, waiting, outcome, shared)
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


def _solve_batch(request: Request, groups: list[Group], outcome: Outcome, shared: Floats | None) -> None:
    layout = request.layout
    data = stack([group.data for group in groups])
    rows = np.concatenate([group.rows for group in groups])
    solution = _best(request, data, *_gather([group.starts() for group in groups], groups))
    if layout.shape.numeric and layout.free_theta.any():
        solution = _follow_rivals(request, data, groups, solution)
    given = np.concatenate([g.weight_one for g in groups]) ** 2 if request.absolute else None
    common = None if shared is None else _common(shared, data, rows, _gather_points(data, groups)[1])
    reported = report(layout, data, solution.theta, given, common)
    for name in ("value", "stderr", "spread", "covariance", "dof", "variance"):
        getattr(outcome, name)[rows] = getattr(reported, name)
    outcome.mixture.q[rows, 0], outcome.mixture.spread[rows, 0] = reported.q, reported.spread
    outcome.mixture.weight[rows] = 1.0
    if outcome.shared is not None:
        outcome.shared[rows] = reported.shared
    outcome.converged[rows], outcome.theta[rows] = solution.converged, solution.theta
    outcome.bound[rows] = solution.bound & ~layout.rightful(solution.theta, data.low, data.high)


def _solve_fully(request: Request, groups: list[Group], outcome: Outcome, shared: Floats | None) -> None:
    layout = request.layout
    data = stack([group.data for group in groups])
    rows = np.concatenate([group.rows for group in groups])
    points, place = _gather_points(data, groups)
    if layout.shape.searchable:
        origin, theta = _gather([group.starts() for group in groups], groups)
        minima = solve(layout, data.take(origin), _with_fixed(request, data, origin, theta), START_TOLERANCE)
        hidden = _hidden(request, points, groups) if request.robust else None
    else:
        minima = _best(request, data, *_gather([group.starts() for group in groups], groups))
        minima = _follow_rivals(request, data, groups, minima)
        origin, hidden = np.arange(len(data.z)), None
    common = None if shared is None else _common(shared, data, rows, place)
    found = refine(request, points, minima, origin, hidden, common)
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
    if outcome.shared is not None:
        outcome.shared[rows] = found.shared
    outcome.count[rows] -= np.count_nonzero(found.outlier, axis=1)
    real = place >= 0
    at = np.broadcast_to(rows[:, None], place.shape)[real], place[real]
    outcome.outlier[at], outcome.deviation[at] = found.outlier[real], found.deviation[real]


def _hidden(request: Request, points: Points, groups: list[Group]) -> Hidden | None:
    """Return the minima that far points could hide."""
    found = [group.far_starts() for group in groups]
    origin, theta = _gather([(sets, starts) for sets, starts, _ in found], groups)
    if not len(origin):
        return None
    here, first = points.take(origin), 0
    v = here.v.copy()
    for _, _, clipped in found:
        v[first : first + len(clipped), : clipped.shape[1]] = clipped
        first += len(clipped)
    theta = _with_fixed(request, points.data, origin, theta)
    data = replace(here, v=v).weighted(np.where(here.used, 1.0, 0.0))
    minima = solve(request.layout, data, theta, START_TOLERANCE)
    return Hidden(minima, origin, here.used & (v == here.v))


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


def _common(shared: Floats, data: DataSets, rows: Ints, place: Ints) -> Floats:
    """Return the change of the points of a batch, in the frame, with each error that they share, (B, n, m)."""
    picked = shared[place] if shared.ndim == 2 else shared[rows[:, None], place]
    return np.where((place >= 0)[:, :, None], picked, 0.0) / data.frame.ys[:, None, None]


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
