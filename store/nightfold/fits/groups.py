"""Data sets made ready: those with the same points left in and the same weights go together."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from nightfold.fits.curve_function import evaluate
from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.feature import constant_p, permutation_p
from nightfold.fits.engine.frame import make_frame
from nightfold.fits.engine.grid import Grid, choose_starts, general_sse, make_grid, place_starts
from nightfold.fits.engine.reduction import Reduction, reduce_points
from nightfold.fits.models.shape import Background, Window
from nightfold.fits.request import Request

BATCH_POINTS = 32_000
"""Data sets are solved in batches of about this many points: larger ones leave the cache."""

RIVALS = 3
"""Further starts of a model of one's own that are followed at most."""


@dataclass(frozen=True)
class Group:
    """Data sets with the same points left in and the same weights, ready to be fitted.

    ``rows`` are their places among all data sets; ``place`` (b, n) are the places of the sorted points among those
    handed in; ``stated`` (b, n) are the standard uncertainties stated, in the frame.
    """

    request: Request
    rows: Ints
    data: DataSets
    window: Window
    weight_one: Floats
    place: Ints
    stated: Floats | None

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

    def starts(self, v: Floats | None = None) -> tuple[Ints, Floats]:
        """Return data set (within the group) and theta of each start to follow, as if the values (b, n) were v."""
        layout, request = self.request.layout, self.request
        if not layout.shape.searchable:
            theta = self._held(layout.shape.grid(self.window))
            return np.repeat(np.arange(len(self.rows)), len(theta)), np.tile(theta, (len(self.rows), 1))
        if not layout.shape.theta:
            return np.arange(len(self.rows)), np.zeros((len(self.rows), 0))
        z = self.reduction.whiten(self.data.z if v is None else v * self.roots)
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

    def far_starts(self) -> tuple[Ints, Floats, Floats]:
        """Return further starts where far points could hide the right one.

        Returns
        -------
        sets, theta : (M,), (M, P) arrays
        clipped : (M, n) float array
            The values that each start was found for, far points brought nearer.
        """
        v, shape = self.data.z / self.roots, self.request.layout.shape
        origin, theta = np.zeros(0, dtype=np.intp), np.zeros((0, len(shape.theta)))
        values = v[:0]
        if not shape.theta:
            return origin, theta, values
        for clipped in (clip_far(v, np.median(v, axis=1, keepdims=True)), clip_far(v, running_median(v))):
            far = (clipped != v).any(axis=1)
            if far.any():
                sets, starts = self.starts(clipped)
                near = shape.near(starts[:, None], theta[None]) & (sets[:, None] == origin)
                fresh = far[sets] & ~near.any(axis=1)
                origin, theta = np.append(origin, sets[fresh]), np.concatenate([theta, starts[fresh]])
                values = np.concatenate([values, clipped[sets[fresh]]])
        return origin, theta, values

    def part(self, row: int, left: Bools) -> Group:
        """Return one of the data sets with some of its points, (n,) bool, alone."""
        data = self.data.take(np.array([row]))
        roots = None if data.root_weights is None else data.root_weights[:, left]
        data = replace(data, u=data.u[:, left], root_weights=roots, z=data.z[:, left])
        stated = None if self.stated is None else self.stated[row : row + 1, left]
        one = slice(row, row + 1)
        return Group(
            self.request,
            self.rows[one],
            data,
            self.window,
            self.weight_one[one],
            self.place[one, left],
            stated,
        )

    def rivals(self, sse: Floats, converged: Bools) -> tuple[Ints, Floats]:
        """Return data set and theta of further starts of a model of one's own that must be followed.

        Those at other scales of the given start where the curve is nearer to the points than at the minimum
        found, (B,) `sse`, which is then not the lowest; the best of all where none was found.
        """
        layout, sets, starts = self.request.layout, [], []
        theta = self._held(layout.shape.more_starts(self.window))
        points = np.arange(self.data.z.shape[1])
        whole = Reduction(self.data.u[0], self.roots, points, self.roots)
        for b, z in enumerate(self.data.z):
            shift = float(self.data.shift[b % len(self.data.shift), 0])
            there = general_sse(layout, whole, theta, z, self.data.coefficients[b], shift)
            limit = sse[b] * (1 - 1e-6) if converged[b] else np.inf
            order = np.argsort(there)[:RIVALS]
            chosen = order[there[order] < limit]
            sets.append(np.full(len(chosen), b))
            starts.append(theta[chosen])
        return np.concatenate(sets), np.concatenate(starts)

    def _held(self, theta: Floats) -> Floats:
        given = self.request.layout.fixed_theta(self.request.fixed, self.data.frame.take(np.arange(1)))[0]
        return np.where(np.isfinite(given), given, theta)

    def feature_p(self, value: Floats) -> Floats:
        """Return the p value of "nothing but background" of each data set, reported values (b, R) given."""
        layout = self.request.layout
        if not layout.shape.searchable:
            curves = [
                evaluate(layout, self.data.u[0], dict(zip(layout.names, v, strict=True))) for v in value
            ]
            left = self.data.z - np.array(curves) * self.roots
            return constant_p(self.data.z, self.roots, (left**2).sum(axis=1), layout.free_count)
        null = "sloped" if layout.background == "sloped" else "flat"
        same = layout.background == null and layout.all_columns_free and not self.request.start
        grid = self.start_grid if same else self.grid(null, start=False)
        return permutation_p(grid, self.reduction, self.data.u[0], self.roots, self.data.z, null)


def patterns(x: Floats, Y: Floats, stderr: Floats | None) -> Iterator[tuple[Ints, Bools, Floats | None]]:
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


def make_group(
    request: Request, rows: Ints, x: Floats, Y: Floats, errors: Floats | None, stated: Floats | None = None
) -> Group:
    """Return data sets that share their points x, sorted and in their frames, with their start grid's window.

    Parameters
    ----------
    errors : (n,) float array or None
        Standard uncertainties that are used as weights.
    stated : (b, n) float array or None
        Standard uncertainties that may be used, row by row.
    """
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
        keys = (Y, np.broadcast_to(block, Y.shape))
        tie = np.lexsort(keys if stated is None else (stated[:, order], *keys), axis=-1)
        Y = np.take_along_axis(Y, tie, axis=1)
        place = order[tie]
    else:
        place = np.broadcast_to(order, Y.shape)
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
    if errors is not None:
        stated = np.broadcast_to(errors, Y.shape) / frame.ys[:, None]
    elif stated is not None:
        stated = np.take_along_axis(stated, place, axis=1) / frame.ys[:, None]
    return Group(request, rows, data, window, scale, place, stated)


def clip_far(v: Floats, middle: Floats) -> Floats:
    """Return values (b, n) with those beyond three times the usual distance from a middle brought to there."""
    reach = 3 * 1.4826 * np.median(np.abs(v - middle), axis=1, keepdims=True)
    return np.asarray(np.clip(v, middle - reach, middle + reach))


def running_median(v: Floats) -> Floats:
    """Return the median of each value and its neighbours, (b, n), three to either side (two in short scans)."""
    side = 3 if v.shape[1] >= 20 else 2
    if v.shape[1] <= side:
        return np.broadcast_to(np.median(v, axis=1, keepdims=True), v.shape)
    around = np.pad(v, ((0, 0), (side, side)), mode="reflect")
    windows = np.lib.stride_tricks.sliding_window_view(around, 2 * side + 1, axis=1)
    return np.asarray(np.median(windows, axis=2))


def _window(u: Floats, background: Background) -> Window:
    steps = np.diff(u)
    steps = steps[steps > 0]
    span = float(u[-1] - u[0])
    return Window(
        float(u[0]),
        float(u[-1]),
        span / len(steps),
        float(max(steps.min(), span * 1e-6)),
        len(steps) + 1,
        background,
    )
