"""Batched Levenberg-Marquardt on the projected problem: many data sets at once.

With ``y = Phi(u; theta) c`` linear in c, c is solved exactly at every theta (variable projection: Golub and
Pereyra, SIAM J. Numer. Anal. 10, 413 (1973)), and theta follows a Gauss-Newton step in the columns
``(1 - P) dPhi/dtheta c`` (Kaufman's form, BIT 15, 49 (1975)) damped as by Marquardt (1963).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.batched import combine, diagonal, dot, gram, inverse
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout

MAX_STEPS = 80
STEP_TOLERANCE = 1e-13
"""A step is the last one when the fall of the sum of squares it promises is this share of it."""
EXACT = 1e-24
"""Residuals this small, relative to the data squared, are rounding."""


@dataclass(frozen=True)
class Point:
    """The projected problem at theta (M, P): sum of squares (M,), curvature (M, p, p), pull (M, p)."""

    theta: Floats
    sse: Floats
    curvature: Floats
    pull: Floats

    def take(self, rows: Ints) -> Point:
        """Return some rows."""
        return Point(self.theta[rows], self.sse[rows], self.curvature[rows], self.pull[rows])

    def replace(self, rows: Bools, other: Point) -> Point:
        """Return this point with some rows of another."""
        return Point(
            np.where(rows[:, None], other.theta, self.theta),
            np.where(rows, other.sse, self.sse),
            np.where(rows[:, None, None], other.curvature, self.curvature),
            np.where(rows[:, None], other.pull, self.pull),
        )


@dataclass(frozen=True)
class Expansion:
    """The model about one theta, M rows, whitened.

    ``c`` (M, L) all coefficients, ``columns`` (M, K, n) the free columns, ``slopes`` (M, p, n) the
    derivatives for the free theta, ``residual`` (M, n), ``normal`` (M, K, K) the
    inverse of the columns' products.
    """

    c: Floats
    columns: Floats
    slopes: Floats
    residual: Floats
    normal: Floats


@dataclass(frozen=True)
class Solution:
    """Where the solver ended, M rows; ``bound`` (M, P) tells which theta are held at a bound."""

    theta: Floats
    sse: Floats
    converged: Bools
    bound: Bools

    def join(self, other: Solution) -> Solution:
        """Return the rows of both."""
        pairs = (
            (getattr(self, name), getattr(other, name)) for name in ("theta", "sse", "converged", "bound")
        )
        return Solution(*(np.concatenate(pair) for pair in pairs))

    def take(self, rows: Ints) -> Solution:
        """Return some rows."""
        return Solution(self.theta[rows], self.sse[rows], self.converged[rows], self.bound[rows])


def expand(layout: Layout, data: DataSets, theta: Floats, refine: bool = False) -> Expansion:
    """Return the model about theta, one row a data set; with `refine`, c to the last digits."""
    numeric = layout.shape.numeric
    if numeric:
        columns = layout.columns(data.u, theta, data.shift)
    else:
        columns, derivatives = layout.basis(data.u, theta, data.shift)
    roots = data.root_weights
    if roots is not None:
        columns = columns * roots[:, None]
    target, free = data.z, columns
    if not layout.all_columns_free:
        target = target - combine(data.coefficients, columns)
        free = columns[:, layout.free_columns]
    normal = inverse(gram(free, free))
    part = combine(dot(free, target), normal)
    residual = target - combine(part, free)
    if refine:
        more = combine(dot(free, residual), normal)
        part, residual = part + more, residual - combine(more, free)
    c = part
    if not layout.all_columns_free:
        c = data.coefficients.copy()
        c[:, layout.free_columns] = part
    slopes = layout.gradients(data.u, theta, c) if numeric else layout.slopes(derivatives, c)
    if not layout.all_theta_free:
        slopes = slopes[:, layout.free_theta]
    if roots is not None:
        slopes = slopes * roots[:, None]
    return Expansion(c, free, slopes, residual, normal)


def linearise(layout: Layout, data: DataSets, theta: Floats) -> Point:
    """Return the projected problem at theta, one row a data set."""
    about = expand(layout, data, theta)
    overlap = gram(about.slopes, about.columns) @ about.normal
    across = about.slopes - combine(overlap, about.columns)
    pull = dot(across, about.residual)
    sse = np.einsum("mn,mn->m", about.residual, about.residual)
    sse = np.where(np.isfinite(sse + pull.sum(axis=1)), sse, np.inf)
    return Point(theta, sse, gram(across, across), pull)


def solve(
    layout: Layout,
    data: DataSets,
    theta: Floats,
    tolerance: float = STEP_TOLERANCE,
    most: int = MAX_STEPS,
) -> Solution:
    """Return the minimum that each start leads to.

    Parameters
    ----------
    layout : Layout
    data : DataSets
        M data sets, one for each start.
    theta : (M, P) float array
        Starts; fixed coordinates hold their fixed values.
    tolerance : float
        A step is the last one when the fall it promises is this share of the sum of squares.
    most : int
        Largest number of steps.
    """
    if layout.shape.numeric and most == MAX_STEPS:
        from nightfold.fits.engine.single import solve_each

        return Solution(*solve_each(layout, data, theta))
    here = linearise(layout, data, theta)
    bound = np.zeros(theta.shape, dtype=bool)
    if not layout.free_theta.any():
        return Solution(theta, here.sse, np.isfinite(here.sse), bound)
    best, sse, converged = theta.copy(), here.sse.copy(), np.zeros(len(theta), dtype=bool)
    exact = EXACT * np.einsum("mn,mn->m", data.z, data.z)
    fitted = np.flatnonzero(layout.free_theta)
    active, sets, damping = np.arange(len(theta)), data, np.full(len(theta), 1e-3)
    for count in range(most):
        step, pulled, held = propose(layout, sets, here, damping)
        promise = pulled * (1.0 + damping)
        trial = linearise(layout, sets, here.theta + step)
        better = trial.sse <= here.sse
        kept = (here.sse - trial.sse) / np.maximum(pulled, 1e-300)
        here = trial if better.all() else here.replace(better, trial)
        stuck = ~better & ((promise <= 1e-11 * here.sse) | (damping > 1e12))
        done = (promise <= tolerance * here.sse) | (here.sse <= exact[active]) | stuck
        damping = next_damping(damping, better, kept)
        if done.any() or count == most - 1:
            best[active], sse[active] = here.theta, here.sse
            converged[active] = done & (damping <= 1e12) & np.isfinite(here.sse)
            bound[active[:, None], fitted] = held
            keep = np.flatnonzero(~done)
            if not len(keep):
                break
            active, here, sets, damping = active[keep], here.take(keep), sets.take(keep), damping[keep]
    return Solution(best, sse, converged, bound)


def next_damping(damping: Floats, better: Bools, kept: Floats) -> Floats:
    """Return the damping after a step that kept this share of its promise.

    A step of the right length keeps all of it, one that is r times too long ``2 - r``. Steps that go too far come
    from residuals large enough to bend the sum of squares; without more damping they go to and fro for long.
    """
    easier = np.where((kept > 1.3) | (damping < 0.01), 0.1, 0.5)
    factor = np.where(kept < 0.7, 4.0, easier)
    return np.where(
        better,
        np.maximum(damping * factor, np.where(kept < 0.7, 0.1, 1e-12)),
        np.maximum(damping * 8.0, 1e-3),
    )


def propose(layout: Layout, data: DataSets, here: Point, damping: Floats) -> tuple[Floats, Floats, Bools]:
    """Return the damped step in theta, its product with the pull, and which free theta are held at a bound."""
    theta, low, high = here.theta, data.low, data.high
    if not layout.all_theta_free:
        theta, low, high = (array[:, layout.free_theta] for array in (theta, low, high))
    held = ((theta <= low) & (here.pull < 0)) | ((theta >= high) & (here.pull > 0))
    pull, matrix = here.pull, here.curvature.copy()
    if held.any():
        pull = np.where(held, 0.0, pull)
        matrix *= ~(held[:, :, None] | held[:, None, :])
    size = diagonal(matrix)
    lifted = size * (1.0 + damping[:, None]) + (size <= 0)
    for k in range(matrix.shape[1]):
        matrix[:, k, k] = lifted[:, k]
    part = combine(pull, inverse(matrix))
    part[~np.isfinite(part)] = 0.0
    moved = np.minimum(np.maximum(theta + part, low), high) - theta
    if layout.all_theta_free:
        step = moved
    else:
        step = np.zeros_like(here.theta)
        step[:, layout.free_theta] = moved
    return step, (part * pull).sum(axis=1), held
