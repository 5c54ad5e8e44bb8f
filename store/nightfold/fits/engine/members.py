"""The fit under each of several variance laws, and how much each law counts.

Under a law with variances s^2 G the weight of the law is ``|G|^-1/2 |J' G^-1 J|^-1/2 SSE_G^-(n-p)/2``, the likelihood
with the scale and everything fitted integrated out (D. A. Harville, J. Am. Stat. Assoc. 72, 320 (1977)). The estimate
itself uses weights W that are capped, and its covariance is what the law makes of them, ``s^2 B G B'`` with
``B = (J'WJ)^-1 J'W``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.batched import combine, diagonal, dot, gram, inverse
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.shared import own_share, shared_part
from nightfold.fits.engine.solver import EXACT, MAX_STEPS, STEP_TOLERANCE, expand, solve
from nightfold.fits.engine.variance import Laws, shapes, weigh

ROUGH = 1e-7
"""Members are solved until a step promises this share of the sum of squares: a thousandth of a stderr."""
ROUGH_STEPS = 15


@dataclass(frozen=True)
class Members:
    """Fits of B data sets under K laws.

    Attributes
    ----------
    theta : (B, K, P) float array
    c : (B, K, L) float array
        Coefficients.
    basic : (B, K, F, F) float array
        Covariance of the free theta and coefficients.
    q, spread : (B, K, R) float arrays
        Coordinates of the reported parameters, and their standard uncertainties.
    covariance : (B, K, R, R) float array
        Of the coordinates.
    weight : (B, K) float array
        How much each law counts; they sum to one.
    scale : (B, K) float array
        Variance of a point of mean variance, in the frame.
    variance : (B, K, n) float array
        Of every point, relative to that.
    converged : (B, K) bool array
    bound : (B, K, P) bool array
    shared : (B, K, R) float array
        Part of the variance of the coordinates that is due to errors that points share.
    """

    theta: Floats
    c: Floats
    basic: Floats
    q: Floats
    spread: Floats
    covariance: Floats
    weight: Floats
    scale: Floats
    variance: Floats
    converged: Bools
    bound: Bools
    shared: Floats

    def replace(self, rows: Bools, other: Members) -> Members:
        """Return these with some rows of others, which has those rows alone."""
        fields = {name: getattr(self, name).copy() for name in self.__dataclass_fields__}
        for name, array in fields.items():
            array[rows] = getattr(other, name)
        return Members(**fields)

    @property
    def point_variance(self) -> Floats:
        """Variance of every point by all laws together, in the frame, (B, n)."""
        return np.asarray(np.einsum("bk,bkn->bn", self.weight * self.scale, self.variance))


def fit_laws(
    layout: Layout,
    points: Points,
    curve: Floats,
    theta: Floats,
    laws: Laws,
    *,
    absolute: bool = False,
    exact: bool = False,
    shared: Floats | None = None,
) -> Members:
    """Return the fits under each law.

    Parameters
    ----------
    curve : (B, n) float array
        A first fit, in the frame, counted from where y is zero.
    theta : (B, P) float array
        Where to start.
    absolute : bool
        Take the scale of stated variances as it is.
    exact : bool
        Solve to the last digits.
    shared : (B, n, m) float array, optional
        Change of the points, in the frame, with each error that they share.
    """
    count, size, n = len(theta), len(laws), points.v.shape[1]
    variance = shapes(laws, curve, points.stated, points.used)
    weights = weigh(laws, variance, points.used)
    each = np.repeat(np.arange(count), size)
    data = points.take(each).weighted(weights.reshape(-1, n))
    limits = (STEP_TOLERANCE, MAX_STEPS) if exact else (ROUGH, ROUGH_STEPS)
    solution = solve(layout, data, theta[each], *limits)
    about = expand(layout, data, solution.theta, refine=exact)
    whole = np.concatenate([about.slopes, about.columns], axis=1)
    used = np.repeat(points.used, size, axis=0)
    excess = np.where(used, (weights * variance).reshape(-1, n), 1.0)
    roots = np.sqrt(excess)
    within, sharp = whole * roots[:, None], whole / roots[:, None]
    both = np.concatenate([whole, sharp])
    inverses, volumes = _scaled_inverse(gram(both, both))
    first, best, volume = inverses[: len(whole)], inverses[len(whole) :], volumes[len(whole) :]
    middle = gram(within, within)
    left = about.residual / roots
    pull = dot(sharp, left)
    sse = np.einsum("mn,mn->m", left, left) - (combine(pull, best) * pull).sum(axis=1)
    spare = np.repeat(np.count_nonzero(points.used, axis=1) - layout.free_count, size)
    exactly = sse <= EXACT * np.einsum("mn,mn->m", data.z, data.z)
    scale = np.where(spare > 0, np.maximum(sse, 0.0) / np.maximum(spare, 1), np.nan)
    level = np.where(points.used[:, None], np.log(variance), 0.0).sum(axis=2).ravel()
    chance = -0.5 * (level + volume + spare * np.log(np.maximum(sse, 1e-300)))
    prior = np.where(_tells(points)[:, None] | (laws.tau == 0) | (size == 1), laws.prior, -np.inf)
    weight = _normalise(chance.reshape(count, size) + prior, exactly, spare)
    if absolute and points.stated is not None:
        total = np.where(points.used, points.stated, 0.0).sum(axis=1)
        scale = np.repeat(total / np.maximum(np.count_nonzero(points.used, axis=1), 1), size)
    own, common = scale, None
    if shared is not None:
        kept = np.where(points.used[:, :, None], shared, 0.0)
        weighted = whole * np.sqrt(weights.reshape(-1, 1, n))
        common, squares = shared_part(
            kept, combine(first, weighted), sharp, 1.0 / np.sqrt(variance.reshape(-1, n)), best
        )
        own = scale if absolute else scale * own_share(sse, squares)
    basic = combine(first, combine(middle, first)) * own[:, None, None]
    basic = basic if common is None else basic + common
    q, dq = layout.report(solution.theta, about.c, data.frame)
    jacobian = dq[:, :, np.concatenate([layout.free_theta, layout.free_columns])]
    covariance = combine(jacobian, combine(basic, jacobian.transpose(0, 2, 1)))
    spread = np.sqrt(diagonal(covariance))
    theirs = np.zeros_like(spread)
    if common is not None:
        theirs = diagonal(combine(jacobian, combine(common, jacobian.transpose(0, 2, 1))))
    spread = np.where(layout.fixed_rows, 0.0, np.where(np.isfinite(spread), spread, np.inf))
    q = q.reshape(count, size, -1)
    _unwrap(layout, q, weight)
    return Members(
        solution.theta.reshape(count, size, -1),
        about.c.reshape(count, size, -1),
        basic.reshape(count, size, *basic.shape[1:]),
        q,
        spread.reshape(q.shape),
        covariance.reshape(*q.shape, -1),
        weight,
        scale.reshape(count, size),
        variance,
        solution.converged.reshape(count, size),
        solution.bound.reshape(count, size, -1),
        theirs.reshape(q.shape),
    )


def _tells(points: Points) -> Bools:
    """Return whether stated variances tell points apart, (B,)."""
    if points.stated is None:
        return np.zeros(len(points.v), dtype=bool)
    least = np.where(points.used, points.stated, np.inf).min(axis=1)
    most = np.where(points.used, points.stated, 0.0).max(axis=1)
    return np.asarray(most > least * (1 + 1e-6))


def _scaled_inverse(products: Floats) -> tuple[Floats, Floats]:
    """Return inverses of positive semidefinite matrices, nan where singular, and logarithms of their determinants."""
    squares = diagonal(products)
    good = squares > 0
    size = np.sqrt(np.where(good, squares, np.nan))
    sizes = size[:, :, None] * size[:, None]
    ratio = products / sizes
    if not good.all():
        ratio = np.nan_to_num(ratio)
    determinant = np.maximum(np.linalg.det(ratio), 1e-30)
    return inverse(ratio) / sizes, np.log(determinant) + np.log(np.where(good, squares, 1.0)).sum(axis=1)


def _normalise(chance: Floats, exactly: Bools, spare: Floats) -> Floats:
    """Return weights (B, K) from log likelihoods; the first law alone where there is no scatter to learn from."""
    chance = np.where(np.isnan(chance), -np.inf, chance)
    top = chance.max(axis=1, keepdims=True)
    weight = np.exp(chance - np.where(np.isfinite(top), top, 0.0))
    alone = ~np.isfinite(top[:, 0]) | exactly.reshape(chance.shape).any(axis=1)
    alone |= spare.reshape(chance.shape)[:, 0] <= 0
    weight[alone] = np.arange(chance.shape[1]) == 0
    return np.asarray(weight / weight.sum(axis=1, keepdims=True))


def _unwrap(layout: Layout, q: Floats, weight: Floats) -> None:
    """Bring angles of all laws to the same turn as that of the law that counts most, in place."""
    for row, parameter in enumerate(layout.parameters):
        if parameter.unit == "rad":
            main = q[np.arange(len(q)), weight.argmax(axis=1), row][:, None]
            q[:, :, row] = main + np.remainder(q[:, :, row] - main + np.pi, 2 * np.pi) - np.pi
