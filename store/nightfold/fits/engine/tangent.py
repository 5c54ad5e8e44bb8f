"""The fitted curve to first order: residuals in units of their scatter, and how the curve moves with each number."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.solver import expand


@dataclass(frozen=True)
class Tangent:
    """The fits of B data sets at the same n points u, sorted, to first order.

    Attributes
    ----------
    u : (n,) float array
    roots : (B, n) float array
        One over the standard deviation of each point, zero for points not used.
    residual : (B, n) float array
        In units of the standard deviation of each point; zero for points not used.
    slopes : (B, p, n) float array
        Change of the curve with each free coordinate and coefficient, in the same units.
    change : (B, R, p) float array
        Change of the reported coordinates with them.
    """

    u: Floats
    roots: Floats
    residual: Floats
    slopes: Floats
    change: Floats


def tangent(layout: Layout, data: DataSets, theta: Floats, deviation: Floats) -> Tangent:
    """Return the fits of data sets that share u at theta, coefficients solved for.

    Parameters
    ----------
    deviation : (B, n) float array
        Standard deviation of each point in the frame, infinite for those not used.
    """
    values = data.z if data.root_weights is None else data.z / data.root_weights
    roots = 1.0 / deviation
    about = expand(layout, replace(data, root_weights=roots, z=values * roots), theta, refine=True)
    _, dq = layout.report(theta, about.c, data.frame)
    free = np.concatenate([layout.free_theta, layout.free_columns])
    slopes = np.concatenate([about.slopes, about.columns], axis=1)
    return Tangent(data.u[0], roots, about.residual, slopes, dq[:, :, free])
