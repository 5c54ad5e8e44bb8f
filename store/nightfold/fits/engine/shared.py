"""Errors that points share: what they make uncertain, and how much of the scatter about the curve is theirs.

Points y have independent errors of variance s^2 G and share m errors of standard uncertainty one, which change them by
L (n, m). The estimate B y then has the covariance ``s^2 B G B' + B L L' B'`` (JCGM 102:2011, 6.2). The sum of squares
about the curve holds both, ``E SSE_G = s^2 (n - p) + tr(P L L')`` with P the projection that makes it: the second part
is taken off before s^2 is told from it, lest it count twice.
"""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats

LEAST_OWN = 0.1
"""Part of the scatter that counts as the points' own at least: both parts are uncertain."""


def shared_part(
    errors: Floats, response: Floats, sharp: Floats, roots: Floats, best: Floats
) -> tuple[Floats, Floats]:
    """Return the covariance (M, F, F) of what is fitted that shared errors cause, and their part of SSE_G, (M,).

    Parameters
    ----------
    errors : (B, n, m) float array
        L; M is a multiple of B, the K fits of a data set side by side.
    response : (M, F, n) float array
        B: how what is fitted changes with the points.
    sharp : (M, F, n) float array
        Derivatives of the curve over the standard deviations of the points, G^(1/2).
    roots : (M, n) float array
        One over these.
    best : (M, F, F) float array
        Inverse of the products of `sharp`.
    """
    sets, (size, free, n) = len(errors), response.shape
    shape = sets, size // max(sets, 1), free, n
    moved = (response.reshape(shape) @ errors[:, None]).reshape(size, free, -1)
    pull = ((sharp * roots[:, None]).reshape(shape) @ errors[:, None]).reshape(size, free, -1)
    whole = ((roots**2).reshape(sets, -1, n) @ (errors**2).sum(axis=2)[:, :, None]).reshape(size)
    return moved @ moved.transpose(0, 2, 1), whole - ((best @ pull) * pull).sum(axis=(1, 2))


def own_share(sse: Floats, shared: Floats) -> Floats:
    """Return which part of sums of squares is due to the points' own errors."""
    part = 1.0 - shared / np.where(sse > 0, sse, np.inf)
    return np.asarray(np.clip(part, LEAST_OWN, 1.0))
