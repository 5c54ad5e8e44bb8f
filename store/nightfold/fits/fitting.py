"""One pass over any number of data sets: group, place starts, solve, report."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.data import DataSets, stack
from nightfold.fits.engine.feature import permutation_p
from nightfold.fits.engine.frame import make_frame
from nightfold.fits.engine.grid import Grid, choose_starts, general_sse, make_grid, place_starts
from nightfold.fits.engine.reduction import Reduction, reduce_points
from nightfold.fits.engine.solver import Solution, solve
from nightfold.fits.engine.uncertainty import report
from nightfold.fits.models.shape import Window
from nightfold.fits.request import Request

BATCH_POINTS = 60_000
"""Data sets are solved in batches of about this many points: larger ones leave the cache."""


@dataclass(frozen=True)
class Group:
    """Data sets with the same points left in and the same weights, ready to be fitted.

    ``rows`` are their places among all data sets; ``u``, ``roots`` (n,) and ``Z`` (b, n) are sorted by x.
    """

    request: Request
    rows: Ints
    data: DataSets
    window: Window
    weight_one: Floats

    @cached_property
    def reduction(self) -> Reduction:
        """The points as the grid sees them."""
        return reduce_points(self.data.u[0], self.roots)

    @property
    def roots(self) -> Floats:
        """Root weights, (n,)."""
        if self.data.root_weights is None:
            return np.ones(self.data.u.shape[1])
        return np.asarray(self.data.root_weights[0])

    def grid(self, null: str, start: bool) -> Grid:
        """Return the grid against a background; with or without the start values asked for."""
        given = dict(self.request.fixed)
        if start:
            given.update(self.request.start)
        layout = self.request.layout
        one = np.arange(1)
        theta = place_starts(layout, self.window, layout.fixed_theta(given, self.data.frame.take(one))[0])
        return make_grid(layout, self.reduction, theta, null)

    @cached_property
    def start_grid(self) -> Grid:
        """The grid that starts are taken from."""
        return self.grid(self.request.layout.background, start=True)

    def starts(self) -> tuple[Ints, Floats]:
        """Return data set (within the group) and theta of each start to follow."""
        layout, request = self.request.layout, self.request
        if not layout.shape.theta:
            return np.arange(len(self.rows)), np.zeros((len(self.rows), 0))
        z = self.reduction.whiten(self.data.z)
        if layout.all_columns_free:
            grid = self.start_grid
            theta = grid.theta
            beyond = z - (z @ grid.null.T) @ grid.null
            sse = np.einsum("bd,bd->b", beyond, beyond)[:, None] - grid.gains(z)
        else:
            given = layout.fixed_theta({**request.fixed, **request.start}, self.data.frame.take(np.arange(1)))
            theta = place_starts(layout, self.window, given[0])
            shift = self.data.shift[:, 0]
            sse = np.stack(
                [
                    general_sse(layout, self.reduction, theta, z[b], self.data.coefficients[b], shift[b])
                    for b in range(len(z))
                ]
            )
        level = self.reduction.roots / np.linalg.norm(self.reduction.roots)
        reference = np.einsum("bd,bd->b", z, z) - (z @ level) ** 2
        sets, points = choose_starts(layout, theta, sse, reference)
        return sets, theta[points]

    def feature_p(self) -> Floats:
        """Return the p value of "nothing but background" of each data set; zero where it cannot be asked."""
        layout = self.request.layout
        if not layout.shape.searchable:
            return np.zeros(len(self.rows))
        null = "sloped" if layout.background == "sloped" else "flat"
        same = layout.background == null and layout.all_columns_free and not self.request.start
        grid = self.start_grid if same else self.grid(null, start=False)
        return permutation_p(grid, self.reduction, self.data.u[0], self.roots, self.data.z, null)


@dataclass(frozen=True)
class Outcome:
    """Everything a pass found, one row a data set (nan where one had too few points).

    Names and shapes as in `engine.uncertainty.Reported`; ``low``, ``high`` are the ends of x, ``count`` the
    points used, ``distinct`` the distinct x among them, ``bound`` (B, P) which coordinates ended at a bound.
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
    errors: Floats | None = None

    def used(self, x: Floats, y: Floats, row: int) -> Bools:
        """Return which of the points handed in a data set was fitted to, (n,)."""
        keep = np.isfinite(x) & np.isfinite(y)
        if self.errors is not None:
            keep &= np.isfinite(self.errors if self.errors.ndim == 1 else self.errors[row])
        return np.asarray(keep)

    def shortage(self, row: int) -> str:
        """Return in words why a data set had too few points."""
        count, distinct, layout = int(self.count[row]), int(self.distinct[row]), self.request.layout
        found = f"{count} point{'' if count == 1 else 's'}"
        if count >= max(layout.free_count, 2):
            found = f"{distinct} distinct value{'' if distinct == 1 else 's'} of x"
        free = layout.free_count
        wanted = f"{layout.shape.name} has {free} free parameter{'' if free == 1 else 's'}"
        return f"{found}, but {wanted}; fix one or add shots"

    @cached_property
    def feature_p(self) -> Floats:
        """The p value of "nothing but background" of each data set, worked out when first asked for."""
        p = np.zeros(len(self.value))
        for group in self.groups:
            p[group.rows] = group.feature_p()
        return p


def fit_sets(request: Request, x: Floats, Y: Floats, stderr: Floats | None) -> Outcome:
    """Return the fits of data sets that share x.

    Parameters
    ----------
    x : (n,) float array
    Y : (B, n) float array
        Points that are nan in x, Y or (when used) stderr are left out.
    stderr : (n,) or (B, n) float array or None
    """
    outcome = _empty_outcome(request, len(Y))
    groups: list[Group] = []
    waiting: list[Group] = []
    for rows, keep, errors in _patterns(x, Y, stderr if request.weighted else None):
        count, distinct = int(keep.sum()), len(np.unique(x[keep]))
        outcome.count[rows], outcome.distinct[rows] = count, distinct
        if min(count, distinct) < request.layout.free_count or distinct < 2:
            continue
        group = _make_group(request, rows, x[keep], Y[np.ix_(rows, keep)], errors)
        outcome.low[rows], outcome.high[rows] = x[keep].min(), x[keep].max()
        outcome.constant[rows] = np.ptp(Y[np.ix_(rows, keep)], axis=1) == 0
        groups.append(group)
        waiting.append(group)
        if sum(g.data.z.size for g in waiting) > BATCH_POINTS:
            _solve_batch(request, waiting, outcome)
            waiting = []
    if waiting:
        _solve_batch(request, waiting, outcome)
    for name, value in request.fixed.items():
        outcome.value[outcome.count > 0, request.layout.names.index(name)] = value
    return replace(outcome, groups=tuple(groups), errors=stderr if request.weighted else None)


def _empty_outcome(request: Request, size: int) -> Outcome:
    names, free = len(request.layout.names), len(request.layout.free_names)
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
    )


def _patterns(x: Floats, Y: Floats, stderr: Floats | None) -> Iterator[tuple[Ints, Bools, Floats | None]]:
    """Yield rows with the same points left in and the same stderr, at most a batch at a time."""
    keep = np.isfinite(Y) & np.isfinite(x)
    keys = keep.astype(np.float64)
    if stderr is not None:
        keep &= np.isfinite(stderr)
        keys = np.where(keep, stderr, 0.0)
    if len(Y) > 1 and not (keys == keys[0]).all():
        members: dict[bytes, list[int]] = {}
        for row, key in enumerate(keys):
            members.setdefault(key.tobytes(), []).append(row)
        sets = [np.array(rows, dtype=np.intp) for rows in members.values()]
    else:
        sets = [np.arange(len(Y))]
    size = max(1, BATCH_POINTS // max(1, len(x)))
    for rows in sets:
        for first in range(0, len(rows), size):
            part = rows[first : first + size]
            kept = keep[part[0]]
            yield part, kept, None if stderr is None else keys[part[0]][kept]


def _make_group(request: Request, rows: Ints, x: Floats, Y: Floats, errors: Floats | None) -> Group:
    layout, shape = request.layout, request.layout.shape
    order = np.argsort(x, kind="stable") if errors is None else np.lexsort((errors, x))
    x, Y = x[order], Y[:, order]
    tied = np.diff(x) == 0
    roots = weight_one = None
    if errors is not None:
        errors = errors[order]
        weight_one = np.sqrt(len(errors) / np.sum(errors**-2.0))
        roots = (weight_one / errors)[None]
        tied = tied & (np.diff(errors) == 0)
    if tied.any():
        block = np.concatenate([[0], np.cumsum(~tied)])
        Y = np.take_along_axis(Y, np.lexsort((Y, np.broadcast_to(block, Y.shape)), axis=-1), axis=1)
    base = None
    if layout.background == "none" or "offset" in layout.fixed:
        base = np.full(len(rows), request.fixed.get("offset", 0.0))
    frame = make_frame(x, Y, shape.origin, base)
    u = (x - frame.x0[0]) / frame.xs[0]
    z = (Y - frame.y0[:, None]) / frame.ys[:, None]
    window = _window(u, layout.background)
    low, high = shape.bounds(window)
    wished = layout.fixed_theta(request.start, frame.take(np.arange(1)))[0]
    low, high = np.fmin(low, wished), np.fmax(high, wished)
    data = DataSets(
        u[None],
        roots,
        z if roots is None else z * roots,
        layout.fixed_coefficients(request.fixed, frame),
        layout.shift(frame),
        low[None],
        high[None],
        frame,
        np.full(len(rows), len(x)),
    )
    scale = np.full(len(rows), np.nan if weight_one is None else weight_one) / frame.ys
    return Group(request, rows, data, window, scale)


def _window(u: Floats, background: str) -> Window:
    steps = np.diff(u)
    steps = steps[steps > 0]
    span = float(u[-1] - u[0])
    return Window(
        float(u[0]),
        float(u[-1]),
        span / len(steps),
        float(max(steps.min(), span * 1e-6)),
        len(steps) + 1,
        background,  # type: ignore[arg-type]
    )


def _solve_batch(request: Request, groups: list[Group], outcome: Outcome) -> None:
    layout = request.layout
    data = stack([group.data for group in groups])
    rows = np.concatenate([group.rows for group in groups])
    origin, theta = _gather_starts(groups)
    held = layout.fixed_theta(request.fixed, data.frame)[origin]
    theta = np.where(np.isfinite(held), held, theta)
    whole = len(origin) == len(rows)
    solution = solve(layout, data if whole else data.take(origin), theta)
    if not whole:
        solution = _best_of(solution, origin)
    given = np.concatenate([g.weight_one for g in groups]) ** 2 if request.absolute else None
    reported = report(layout, data, solution.theta, given)
    for name in ("value", "stderr", "spread", "covariance", "dof", "variance"):
        getattr(outcome, name)[rows] = getattr(reported, name)
    outcome.converged[rows] = solution.converged
    floors = np.array([theta.floor for theta in layout.shape.theta], dtype=bool)
    at_floor = floors & (solution.theta <= data.low)
    outcome.bound[rows] = solution.bound & ~at_floor


def _best_of(solution: Solution, origin: Ints) -> Solution:
    """Return the best of each data set's solutions; the first among equals."""
    order = np.lexsort((np.arange(len(origin)), solution.sse, origin))
    _, first = np.unique(origin[order], return_index=True)
    return solution.take(order[first])


def _gather_starts(groups: list[Group]) -> tuple[Ints, Floats]:
    """Return data set (within the batch) and theta of every start of every group."""
    sets, starts, first = [], [], 0
    for group in groups:
        which, theta = group.starts()
        sets.append(which + first)
        starts.append(theta)
        first += len(group.rows)
    return np.concatenate(sets), np.concatenate(starts)
