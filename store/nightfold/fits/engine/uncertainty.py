"""Uncertainties: covariance of the reported parameters, and t intervals in the coordinates of the fit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.batched import combine, diagonal, gram, inverse
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.links import falls, steepness, to_coordinate, to_value
from nightfold.fits.engine.mixture import Mixture, t_quantile
from nightfold.fits.engine.shared import own_share, shared_part
from nightfold.fits.engine.solver import expand

if TYPE_CHECKING:
    from nightfold.fits.models.shape import Link


@dataclass(frozen=True)
class Reported:
    """Reported parameters of M data sets.

    Attributes
    ----------
    q : (M, R) float array
        Coordinates, of the parameters and of what is derived from them.
    value, stderr : (M, R) float arrays
        In the units of x and y; a fixed parameter has stderr 0.
    spread : (M, R) float array
        Standard uncertainty of the coordinate q, in which intervals are symmetric.
    covariance : (M, F, F) float array
        Of the free reported parameters.
    dof : (M,) float array
        Degrees of freedom of the scatter; infinite for absolute stderr.
    variance : (M,) float array
        Residual variance in units of y squared (of weight one), nan without degrees of freedom.
    shared : (M, R) float array
        Part of stderr that is due to errors that points share.
    """

    q: Floats
    value: Floats
    stderr: Floats
    spread: Floats
    covariance: Floats
    dof: Floats
    variance: Floats
    shared: Floats


def report(
    layout: Layout, data: DataSets, theta: Floats, given: Floats | None, shared: Floats | None = None
) -> Reported:
    """Return the reported parameters and their scaled covariance.

    Parameters
    ----------
    given : (M,) float array or None
        Variance of a point of weight one, in the frame's units, when stderr is absolute; None to estimate it.
    shared : (M, n, m) float array, optional
        Change of the points, in the frame, with each error that they share.

    Notes
    -----
    ``cov = s^2 (F F^T)^-1`` with F the derivatives for all free theta and coefficients and
    ``s^2 = SSE / (n - p)``, or the given one.
    """
    about = expand(layout, data, theta, refine=True)
    q, dq = layout.report(theta, about.c, data.frame)
    free = np.concatenate([layout.free_theta, layout.free_columns])
    whole = np.concatenate([about.slopes, about.columns], axis=1)
    products = gram(whole, whole)
    size = np.sqrt(diagonal(products))
    size = np.where(size > 0, size, np.nan)
    sizes = size[:, :, None] * size[:, None]
    sse = np.einsum("mn,mn->m", about.residual, about.residual)
    spare = (data.count - layout.free_count).astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = np.where(spare > 0, sse / spare, np.nan)
        scale = variance if given is None else given
        basic = inverse(np.nan_to_num(products / sizes)) / sizes
        jacobian = dq[:, :, free]
        theirs = np.zeros_like(q)
        common: Floats | float = 0.0
        if shared is not None:
            roots = np.ones_like(data.z) if data.root_weights is None else data.root_weights
            roots = np.broadcast_to(roots, data.z.shape)
            common, squares = shared_part(shared, combine(basic, whole * roots[:, None]), whole, roots, basic)
            theirs = diagonal(combine(jacobian, combine(common, jacobian.transpose(0, 2, 1))))
            scale = scale if given is not None else scale * own_share(sse, squares)
        cov_q = combine(jacobian, combine(basic * scale[:, None, None] + common, jacobian.transpose(0, 2, 1)))
        spread = np.sqrt(diagonal(cov_q))
    fixed, free_rows = layout.fixed_rows, layout.free_rows
    spread = np.where(fixed, 0.0, np.where(np.isfinite(spread), spread, np.inf))
    value, slopes = from_coordinates(q, spread, layout.links)
    with np.errstate(invalid="ignore", over="ignore"):
        stderr = np.where(fixed, 0.0, spread * np.abs(slopes))
        outer = slopes[:, :, None] * slopes[:, None]
        covariance = (cov_q * outer)[:, free_rows][:, :, free_rows]
    stderr = np.where(np.isnan(stderr), np.inf, stderr)
    dof = spare if given is None else np.full(len(q), np.inf)
    theirs = np.sqrt(theirs) * np.abs(slopes)
    return Reported(q, value, stderr, spread, covariance, dof, variance * data.frame.ys**2, theirs)


def from_coordinates(q: Floats, spread: Floats, links: tuple[Link, ...]) -> tuple[Floats, Floats]:
    """Return values and their derivatives for coordinates q of standard uncertainty `spread`, (M, R) all.

    The derivative of a root is held down, so that its uncertainty is no more than the root of that of q.
    """
    value, slopes = q.copy(), np.ones_like(q)
    for row, link in enumerate(links):
        if link != "linear":
            value[:, row] = to_value(q[:, row], link)
            slopes[:, row] = steepness(value[:, row], link)
        if link == "root":
            with np.errstate(divide="ignore"):
                slopes[:, row] = 0.5 / np.sqrt(np.maximum(q[:, row], spread[:, row] / 4))
    return value, slopes


def interval(value: Floats, spread: Floats, dof: Floats, link: Link, level: float) -> tuple[Floats, Floats]:
    """Return the limits of a central interval, symmetric in the coordinate of the fit.

    Parameters
    ----------
    value, spread, dof : (…) float arrays
        Reported value, standard uncertainty of its coordinate, degrees of freedom (infinite: normal).
    link : Link
        How the value follows from its coordinate.
    level : float
        Probability inside, between 0 and 1.
    """
    reach = t_quantile(0.5 + level / 2, dof)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        half = np.where(spread == 0, 0.0, reach * spread)
        q = to_coordinate(value, link)
        low, high = between(q - half, q + half, link)
    known = half == 0
    return np.where(known, value, low), np.where(known, value, high)


def mixed_interval(value: Floats, mixture: Mixture, link: Link, level: float) -> tuple[Floats, Floats]:
    """Return the limits of a central interval of a mixture."""
    low, high = between(mixture.quantile(0.5 - level / 2), mixture.quantile(0.5 + level / 2), link)
    known = (mixture.spread == 0).all(axis=1)
    return np.where(known, value, low), np.where(known, value, high)


def between(low: Floats, high: Floats, link: Link) -> tuple[Floats, Floats]:
    """Return the least and the largest value of coordinates from low to high."""
    ends = to_value(low, link), to_value(high, link)
    return ends[::-1] if falls(link) else ends
