"""The band of a fitted curve: how far the curve itself is known, from the joint covariance."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from nightfold.fits.curve_function import evaluate
from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.links import falls, to_coordinate, to_value
from nightfold.fits.engine.mixture import t_quantile
from nightfold.fits.estimate import Estimate, check_level

if TYPE_CHECKING:
    from nightfold.fits.result import FitResult

_STEP = 0.05


def curve_band(result: FitResult, x: Floats, level: float) -> tuple[Floats, Floats]:
    """Return the ends of the band of the curve at x, of the shape of x; nan where the data do not tell.

    Notes
    -----
    To first order in the coordinates q of the fit, in which intervals are symmetric: the variance of the curve is
    g^T R g, with g its differences for a step of one standard uncertainty of each q, and R their correlations (JCGM
    100:2008, 5.2.2). The half width is that times the quantile of Student's t. A parameter whose correlations are not
    known counts as independent.
    """
    reach = t_quantile(0.5 + check_level(level) / 2, np.array(_dof(result)))
    values = {name: estimate.value for name, estimate in result.estimates.items()}
    slopes = [_slope(result, x, values, name) for name in result.free_names]
    if not slopes:
        return result.predict(x), result.predict(x)
    gradient = np.stack(slopes)
    with np.errstate(all="ignore"):
        variance = np.einsum("i...,ij,j...->...", gradient, _correlations(result), gradient)
        half = reach * np.sqrt(np.maximum(variance, 0.0))
    middle = result.predict(x)
    half = np.where(np.isfinite(half), half, np.nan)
    return middle - half, middle + half


def _dof(result: FitResult) -> float:
    return float("inf") if result.settings["absolute_stderr"] else float(result.dof)


def _slope(result: FitResult, x: Floats, values: dict[str, float], name: str) -> Floats:
    """Return how much the curve changes where a parameter's coordinate changes by its standard uncertainty."""
    estimate = result.estimates[name]
    ends = [
        evaluate(result.request.layout, x, {**values, name: _moved(estimate, step)})
        for step in (-_STEP, _STEP)
    ]
    return np.asarray((ends[1] - ends[0]) / (2 * _STEP))


def _moved(estimate: Estimate, steps: float) -> float:
    """Return the value some standard uncertainties further along its coordinate."""
    q = to_coordinate(np.array(estimate.value), estimate.link)
    spread = estimate.stderr if estimate.spread is None else estimate.spread
    return float(to_value(q + steps * spread, estimate.link))


def _correlations(result: FitResult) -> Floats:
    """Return the correlations of the coordinates of the free parameters."""
    covariance = result.covariance_matrix
    with np.errstate(all="ignore"):
        size = np.sqrt(np.diagonal(covariance))
        correlations = covariance / np.outer(size, size)
    turned = np.array([-1.0 if falls(result.estimates[name].link) else 1.0 for name in result.free_names])
    correlations = np.where(np.isfinite(correlations), correlations, 0.0) * np.outer(turned, turned)
    np.fill_diagonal(correlations, 1.0)
    return np.asarray(correlations)
