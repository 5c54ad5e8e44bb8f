"""Uncertainties: covariance of the reported parameters, and t intervals in the coordinates of the fit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.batched import combine, diagonal, gram, inverse
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.solver import expand

if TYPE_CHECKING:
    from nightfold.fits.models.shape import Link


@dataclass(frozen=True)
class Reported:
    """Reported parameters of M data sets.

    Attributes
    ----------
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
    """

    value: Floats
    stderr: Floats
    spread: Floats
    covariance: Floats
    dof: Floats
    variance: Floats


def report(layout: Layout, data: DataSets, theta: Floats, given: Floats | None) -> Reported:
    """Return the reported parameters and their scaled covariance.

    Parameters
    ----------
    given : (M,) float array or None
        Variance of a point of weight one, in the frame's units, when stderr is absolute; None to estimate it.

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
        basic = inverse(np.nan_to_num(products / sizes)) / sizes * scale[:, None, None]
        jacobian = dq[:, :, free]
        cov_q = combine(jacobian, combine(basic, jacobian.transpose(0, 2, 1)))
        spread = np.sqrt(diagonal(cov_q))
    value, steepness = from_coordinates(q, layout.shape.links())
    fixed = np.array([name in layout.fixed for name in layout.names])
    spread = np.where(fixed, 0.0, np.where(np.isfinite(spread), spread, np.inf))
    with np.errstate(invalid="ignore", over="ignore"):
        stderr = np.where(fixed, 0.0, spread * np.abs(steepness))
        outer = steepness[:, :, None] * steepness[:, None]
        covariance = (cov_q * outer)[:, ~fixed][:, :, ~fixed]
    stderr = np.where(np.isnan(stderr), np.inf, stderr)
    dof = spare if given is None else np.full(len(q), np.inf)
    return Reported(value, stderr, spread, covariance, dof, variance * data.frame.ys**2)


def from_coordinates(q: Floats, links: tuple[Link, ...]) -> tuple[Floats, Floats]:
    """Return reported values and their derivatives for q; columns beyond `links` are linear."""
    value, steepness = q.copy(), np.ones_like(q)
    for row, link in enumerate(links):
        if link == "log":
            with np.errstate(over="ignore"):
                value[:, row] = steepness[:, row] = np.exp(q[:, row])
        elif link == "reciprocal":
            with np.errstate(divide="ignore"):
                value[:, row] = 1.0 / q[:, row]
                steepness[:, row] = -(value[:, row] ** 2)
    return value, steepness


def interval(value: Floats, spread: Floats, dof: Floats, link: Link, level: float) -> tuple[Floats, Floats]:
    """Return the limits of a central interval, symmetric in the coordinate of the fit.

    Parameters
    ----------
    value, spread, dof : (…) float arrays
        Reported value, standard uncertainty of its coordinate, degrees of freedom (infinite: normal).
    link : {"linear", "log", "reciprocal"}
        The coordinate: the value itself, its logarithm, or its reciprocal (which is not negative).
    level : float
        Probability inside, between 0 and 1.
    """
    reach = t_quantile(0.5 + level / 2, dof)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        half = np.where(spread == 0, 0.0, reach * spread)
        if link == "log":
            low, high = value * np.exp(-half), value * np.exp(half)
        elif link == "reciprocal":
            low, high = 1.0 / (1.0 / value + half), 1.0 / np.maximum(1.0 / value - half, 0.0)
        else:
            low, high = value - half, value + half
    known = half == 0
    return np.where(known, value, low), np.where(known, value, high)


def t_quantile(probability: float, dof: Floats) -> Floats:
    """Return quantiles of Student's t, infinite without degrees of freedom."""
    from scipy.special import ndtri, stdtrit

    finite = np.where(np.isfinite(dof) & (dof > 0), dof, 1.0)
    quantile = np.where(np.isfinite(dof), stdtrit(finite, probability), ndtri(probability))
    return np.asarray(np.where(dof > 0, quantile, np.inf), dtype=np.float64)
