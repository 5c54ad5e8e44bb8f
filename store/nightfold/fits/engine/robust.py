"""Outliers: looked for among standardised residuals, left out, and confirmed or taken back.

Each minimum is followed with weights of Student's t with 4 degrees of freedom (K. L. Lange, R. J. A. Little and
J. M. G. Taylor, J. Am. Stat. Assoc. 84, 881 (1989)) on residuals divided by what a point scatters there: raw residuals
would have every point high on a curve with multiplicative scatter for an outlier. What stands out is left out;
whether it is an outlier is then decided by a fit that has not seen it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.batched import combine
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.members import Members
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.solver import expand, solve
from nightfold.fits.engine.variance import RHO, Laws, shapes

NU = 4.0
ROUNDS = 6
STEPS = 2
STILL = 0.02
"""A fit has come to rest when the curve moves by less than this many standard deviations anywhere."""
CANDIDATE = 3.0
NORMAL = 1.2034
"""Standard deviation of normal scatter in units of the scale that Student's t with 4 degrees of freedom finds."""
MOST_SHARE = 0.15
ALPHA = 0.003
SCALE_ROUNDS = 8
FAR_WEIGHT = 1e-3
TRIED = Laws(RHO[[0, 3, 5, 7, 9, 12]], np.zeros(6), np.zeros(6), np.full(6, np.inf))
TRIED_STATED = Laws(np.append(TRIED.rho, 0.0), np.append(np.zeros(6), 1.0), np.zeros(7), np.full(7, np.inf))


@dataclass(frozen=True)
class Robust:
    """A fit that single points cannot draw away, M rows.

    ``theta`` (M, P), ``curve`` (M, n) counted from where y is zero, ``z`` (M, n) standardised residuals (zero for
    points not used), ``likelihood`` (M,).
    """

    theta: Floats
    curve: Floats
    z: Floats
    likelihood: Floats

    def take(self, rows: Ints) -> Robust:
        """Return some rows."""
        return Robust(self.theta[rows], self.curve[rows], self.z[rows], self.likelihood[rows])


def follow(layout: Layout, points: Points, theta: Floats, near: Bools, laws: Laws) -> Robust:
    """Return the robust fit that each start leads to.

    Parameters
    ----------
    points : Points
        M data sets, one for each start.
    theta : (M, P) float array
    near : (M, n) bool array
        Points that the starts go by.
    laws : Laws
        Variance laws to choose from.
    """
    theta = theta.copy()
    residual = _residual(layout, points, theta, np.where(points.used, np.where(near, 1.0, FAR_WEIGHT), 0.0))
    rows, some = np.arange(len(theta)), points
    for _ in range(ROUNDS):
        left = residual[rows]
        z, variance, _ = _standardise(some, laws, some.v - left + some.origin, left)
        weights = np.where(some.used, (NU + 1.0) / (NU + z * z) / variance, 0.0)
        theta[rows] = solve(layout, some.weighted(weights), theta[rows], 1e-6, STEPS).theta
        residual[rows] = found = _residual(layout, some, theta[rows], weights)
        size = np.abs(np.where(some.used, found - left, 0.0)) * np.abs(z) / np.maximum(np.abs(left), 1e-300)
        moving = np.flatnonzero(~(size.max(axis=1) < STILL))
        if not len(moving):
            break
        if len(moving) < len(rows):
            rows, some = rows[moving], some.take(moving)
    curve = points.v - residual + points.origin
    z, _, likelihood = _standardise(points, laws, curve, residual)
    return Robust(theta, curve, z, likelihood)


def _residual(layout: Layout, points: Points, theta: Floats, weights: Floats) -> Floats:
    """Return the residuals of points that count, unweighted, with the coefficients that fit best with weights."""
    about = expand(layout, points.weighted(weights), theta)
    roots = np.sqrt(np.where(weights > 0, weights, np.inf))
    return np.asarray(about.residual / roots)


def _standardise(
    points: Points, laws: Laws, curve: Floats, residual: Floats
) -> tuple[Floats, Floats, Floats]:
    """Return residuals over their scatter by the likeliest law, its variances (M, n), its log likelihood (M,)."""
    variance = shapes(laws, curve, points.stated, points.used)
    squares = np.where(points.used[:, None], residual[:, None] ** 2 / variance, 0.0)
    count = np.count_nonzero(points.used, axis=1)[:, None]
    scale = np.maximum(squares.sum(axis=2) / count, 1e-300)
    for _ in range(SCALE_ROUNDS):
        scale = ((NU + 1.0) * squares / (NU + squares / scale[:, :, None])).sum(axis=2) / count
        scale = np.maximum(scale, 1e-300)
    chance = -0.5 * (
        count * np.log(scale)
        + np.where(points.used[:, None], np.log(variance), 0.0).sum(axis=2)
        + (NU + 1.0) * np.log1p(squares / scale[:, :, None] / NU).sum(axis=2)
    )
    best = np.where(np.isnan(chance), -np.inf, chance).argmax(axis=1)
    rows = np.arange(len(best))
    chosen = variance[rows, best]
    z = np.where(points.used, residual / np.sqrt(scale[rows, best][:, None] * chosen), 0.0)
    return z, chosen, chance[rows, best]


def candidates(layout: Layout, points: Points, z: Floats) -> Bools:
    """Return which points stand out, (B, n): beyond 3 standard deviations, the farthest first, at most 15 %.

    Three or more shots that are all there are at one x are no outliers, there the model is wrong; and enough
    points stay to fit every parameter.
    """
    size = np.where(points.used, np.abs(z), 0.0)
    count = np.count_nonzero(points.used, axis=1)
    most = np.minimum((MOST_SHARE * count).astype(np.intp), count - layout.free_count - 2)
    rank = np.argsort(np.argsort(-size, axis=1, kind="stable"), axis=1, kind="stable")
    out = (size > CANDIDATE * NORMAL) & (rank < most[:, None])
    rows = np.flatnonzero(out.any(axis=1))
    for row in rows:
        u = points.data.u[min(int(row), len(points.data.u) - 1)]
        used = points.used[row]
        _, where = np.unique(u[used], return_inverse=True)
        shots = np.bincount(where)
        lost = np.bincount(where, weights=out[row, used])
        whole = (lost == shots) & (shots > 2)
        out[row, np.flatnonzero(used)[whole[where]]] = False
        left = len(shots) - np.count_nonzero((lost == shots) & ~whole)
        if left < max(layout.free_count, 2):
            out[row] = False
    return np.asarray(out)


def confirm(layout: Layout, points: Points, members: Members, out: Bools) -> Bools:
    """Return which candidates are outliers: improbable (0.3 % shared over all points) by fits without them.

    Parameters
    ----------
    points : Points
        With the candidates among the points that count.
    members : Members
        Fits without the candidates.
    out : (B, n) bool array
        The candidates.
    """
    from scipy.special import stdtr

    size, n, count = members.weight.shape[1], points.v.shape[1], len(out)
    each = np.repeat(np.arange(count), size)
    theta = members.theta.reshape(count * size, -1)
    c = members.c.reshape(count * size, -1)
    data, y = points.data.take(each), points.v[each]
    columns, derivatives = layout.basis(data.u, theta, data.shift)
    slopes = layout.slopes(derivatives, c)[:, layout.free_theta]
    whole = np.concatenate([slopes, columns[:, layout.free_columns]], axis=1)
    basic = members.basic.reshape(count * size, *members.basic.shape[2:])
    lever = (whole * (basic @ whole)).sum(axis=1)
    spread = members.scale.reshape(-1, 1) * members.variance.reshape(-1, n) + lever
    t = np.abs(y - combine(c, columns)) / np.sqrt(np.maximum(spread, 1e-300))
    used = np.count_nonzero(points.used, axis=1)
    spare = np.maximum(used - np.count_nonzero(out, axis=1) - layout.free_count, 1)
    p = 2.0 * stdtr(np.repeat(spare.astype(np.float64), size)[:, None], -t)
    p = np.where(np.isnan(p), 1.0, p).reshape(count, size, n)
    return np.asarray(out & (np.einsum("bk,bkn->bn", members.weight, p) < ALPHA / used[:, None]))
