"""Batched Levenberg-Marquardt on the projected problem: many data sets at once.

With ``y = Phi(u; theta) c`` linear in c, c is solved exactly at every theta (variable projection: Golub and
Pereyra, SIAM J. Numer. Anal. 10, 413 (1973)), and theta follows a Gauss-Newton step in the columns
``(1 - P) dPhi/dtheta c`` (Kaufman's form, BIT 15, 49 (1975)) damped as by Marquardt (1963).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout

MAX_STEPS = 80
STEP_TOLERANCE = 1e-15
"""A step is the last one when the fall of the sum of squares it promises is this share of it."""
EXACT = 1e-28
"""Residuals this small, relative to the data squared, are rounding."""


@dataclass(frozen=True)
class Point:
    """The projected problem at one theta, M rows.

    ``c`` (M, L) all coefficients, ``sse`` (M,), ``slopes`` (M, p, n) the whitened derivatives for the free
    theta, ``curvature`` (M, p, p) and ``pull`` (M, p) of the projected problem.
    """

    theta: Floats
    c: Floats
    sse: Floats
    slopes: Floats
    columns: Floats
    curvature: Floats
    pull: Floats

    def take(self, rows: Ints) -> Point:
        """Return some rows."""
        return Point(*(getattr(self, name)[rows] for name in Point.__dataclass_fields__))

    @property
    def rows(self) -> int:
        """Number of rows, M."""
        return len(self.sse)

    def with_rows(self, rows: Bools, other: Point) -> Point:
        """Return this point with some rows of another as long."""
        return Point(
            *(
                np.where(rows.reshape(-1, *[1] * (getattr(self, name).ndim - 1)), getattr(other, name), mine)
                for name, mine in self.items()
            )
        )

    def with_part(self, rows: Ints, part: Point) -> Point:
        """Return this point with the rows of a shorter one put where they belong."""
        arrays = []
        for name, mine in self.items():
            array = mine.copy()
            array[rows] = getattr(part, name)
            arrays.append(array)
        return Point(*arrays)

    def items(self) -> list[tuple[str, Floats]]:
        """Return names and arrays."""
        return [(name, getattr(self, name)) for name in Point.__dataclass_fields__]


@dataclass(frozen=True)
class Solution:
    """Where the solver ended, M rows: the ``point``, whether it ``converged``, which theta are ``bound``."""

    point: Point
    converged: Bools
    bound: Bools


def inverse(matrix: Floats) -> Floats:
    """Return the inverses of positive semidefinite matrices, (M, k, k), kept from being singular."""
    diagonal = np.einsum("mii->mi", matrix)
    ridge = 1e-14 * diagonal + 1e-200
    lifted = matrix.copy()
    np.einsum("mii->mi", lifted)[:] += ridge
    try:
        return np.asarray(np.linalg.inv(lifted))
    except np.linalg.LinAlgError:
        return np.stack([_one_inverse(one) for one in lifted])


def _one_inverse(matrix: Floats) -> Floats:
    try:
        return np.asarray(np.linalg.inv(matrix))
    except np.linalg.LinAlgError:
        return np.full_like(matrix, np.nan)


def linearise(layout: Layout, data: DataSets, theta: Floats) -> Point:
    """Return the projected problem at theta, one row a data set."""
    columns, derivatives = layout.basis(data.u, theta, data.shift)
    roots = data.root_weights
    if roots is not None:
        columns = columns * roots[:, None]
    target, free = data.z, columns
    if not layout.all_columns_free:
        target = target - np.einsum("ml,mln->mn", data.coefficients, columns)
        free = columns[:, layout.free_columns]
    if free.shape[1]:
        normal = inverse(free @ free.transpose(0, 2, 1))
        part = (normal @ (free @ target[:, :, None]))[:, :, 0]
        residual = target - (part[:, None] @ free)[:, 0]
        more = (normal @ (free @ residual[:, :, None]))[:, :, 0]
        part, residual = part + more, residual - (more[:, None] @ free)[:, 0]
    else:
        part, residual = np.zeros((len(theta), 0)), target
    c = part if layout.all_columns_free else data.coefficients.copy()
    if not layout.all_columns_free:
        c[:, layout.free_columns] = part
    slopes = layout.slopes(derivatives, c)[:, layout.free_theta]
    if roots is not None:
        slopes = slopes * roots[:, None]
    across = slopes
    if free.shape[1]:
        overlap = normal @ (free @ slopes.transpose(0, 2, 1))
        across = slopes - overlap.transpose(0, 2, 1) @ free
    curvature = across @ across.transpose(0, 2, 1)
    pull = (across @ residual[:, :, None])[:, :, 0]
    sse = np.einsum("mn,mn->m", residual, residual)
    sse = np.where(np.isfinite(sse) & np.isfinite(pull).all(axis=1), sse, np.inf)
    return Point(theta, c, sse, slopes, free, curvature, pull)


def solve(layout: Layout, data: DataSets, theta: Floats) -> Solution:
    """Return the minimum that each start leads to.

    Parameters
    ----------
    layout : Layout
    data : DataSets
        M data sets, one for each start.
    theta : (M, P) float array
        Starts; fixed coordinates hold their fixed values.
    """
    best = linearise(layout, data, theta.copy())
    converged = np.zeros(len(theta), dtype=bool)
    bound = np.zeros(theta.shape, dtype=bool)
    if not layout.free_theta.any():
        return Solution(best, np.isfinite(best.sse), bound)
    total = np.einsum("mn,mn->m", data.z, data.z)
    fitted = np.flatnonzero(layout.free_theta)
    active, here, sets, damping = np.arange(len(theta)), best, data, np.full(len(theta), 1e-3)
    for count in range(MAX_STEPS):
        step, promise, held = propose(layout, sets, here, damping)
        promise *= 1.0 + damping
        trial = linearise(layout, sets, here.theta + step)
        better = trial.sse <= here.sse
        here = trial if better.all() else here.with_rows(better, trial)
        stuck = ~better & ((promise <= 1e-11 * here.sse) | (damping > 1e12))
        done = (promise <= STEP_TOLERANCE * here.sse) | (here.sse <= EXACT * total[active]) | stuck
        damping = np.where(better, np.maximum(damping * 0.1, 1e-12), damping * 8.0)
        last = count == MAX_STEPS - 1
        if done.any() or last:
            converged[active] = done & (damping <= 1e12) & np.isfinite(here.sse)
            bound[np.ix_(active, fitted)] = held
            best = here if here.rows == best.rows else best.with_part(active, here)
            keep = np.flatnonzero(~done)
            if not len(keep):
                break
            active, here, sets, damping = active[keep], here.take(keep), sets.take(keep), damping[keep]
    return Solution(best, converged, bound)


def propose(layout: Layout, data: DataSets, here: Point, damping: Floats) -> tuple[Floats, Floats, Bools]:
    """Return the damped step in theta, the fall it promises, and which free theta are held at a bound."""
    free = layout.free_theta
    theta, low, high = here.theta[:, free], data.low[:, free], data.high[:, free]
    held = ((theta <= low) & (here.pull < 0)) | ((theta >= high) & (here.pull > 0))
    pull = np.where(held, 0.0, here.pull)
    matrix = here.curvature
    if held.any():
        matrix = matrix * ~(held[:, :, None] | held[:, None, :])
    diagonal = np.einsum("mii->mi", matrix)
    lifted = matrix.copy()
    np.einsum("mii->mi", lifted)[:] += damping[:, None] * diagonal + np.where(diagonal > 0, 0.0, 1.0)
    part = (inverse(lifted) @ pull[:, :, None])[:, :, 0]
    part = np.where(np.isfinite(part), part, 0.0)
    moved = np.clip(theta + part, low, high) - theta
    step = np.zeros_like(here.theta)
    step[:, free] = moved
    return step, np.einsum("mp,mp->m", part, pull), held
