"""How the scatter of a point may depend on where it lies: the laws a fit is averaged over.

The variance of a point is taken as proportional to ``(1 - rho) + rho f^2 / <f^2>``, f the fitted curve with its
background: rho = 0 is scatter that is the same everywhere, rho near 1 scatter that grows with the signal.
Stated uncertainties sigma, where there are any, enter with a share tau: ``(1 - tau) (…) + tau sigma^2 / <sigma^2>``.
Nobody knows rho and tau beforehand, and 16 points tell little about them; so the fit is done with each and
averaged (see `mixture`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats

RHO = np.concatenate([[0.0], 1.0 / (1.0 + np.exp(-np.linspace(-3.0, 6.0, 12)))])
HALF_RHO = RHO[[0, 4, 7, 10, 12]]
CAP = 10.0
"""Largest ratio of the weights of two points that the curve alone can bring about.

Where the curve goes to zero a law near rho = 1 would give points a hundred times the weight of those on the
line, and a fit is then drawn to wherever the model is a little wrong out there. The law itself is not capped:
it says what the uncertainty of the estimate so weighted is."""
STATED_CAP = 1000.0


@dataclass(frozen=True)
class Laws:
    """K variance laws.

    Attributes
    ----------
    rho, tau : (K,) float arrays
    prior : (K,) float array
        Logarithm of the weight of each law before the data are seen.
    cap : (K,) float array
        Largest ratio of weights.
    """

    rho: Floats
    tau: Floats
    prior: Floats
    cap: Floats

    def __len__(self) -> int:
        return len(self.rho)


def _laws(*parts: tuple[float, Floats, float]) -> Laws:
    """Return laws from (tau, rhos, cap) of equal prior weight."""
    return Laws(
        np.concatenate([rho for _, rho, _ in parts]),
        np.concatenate([np.full(len(rho), tau) for tau, rho, _ in parts]),
        np.concatenate([np.full(len(rho), -np.log(len(rho))) for _, rho, _ in parts]),
        np.concatenate([np.full(len(rho), cap) for _, rho, cap in parts]),
    )


ZERO = RHO[:1]
LEARNT = _laws((0.0, RHO, CAP))
"""Nothing is stated: the law is learnt from the scatter alone."""
WITH_STATED = _laws((0.0, RHO, CAP), (0.5, HALF_RHO, 3 * CAP), (1.0, ZERO, STATED_CAP))
"""Uncertainties are stated and may be used."""
EQUAL = _laws((0.0, ZERO, CAP))
"""Every point scatters the same."""
STATED = _laws((1.0, ZERO, np.inf))
"""Points scatter as stated."""


def shapes(laws: Laws, curve: Floats, stated: Floats | None, used: Bools) -> Floats:
    """Return the variance of every point by every law, (B, K, n), of mean one over the points used.

    Parameters
    ----------
    curve : (B, n) float array
        The fitted curve with its background, in any unit, counted from zero.
    stated : (B, n) float array or None
        Stated variances, in any unit.
    used : (B, n) bool array
        Points that count.
    """
    growth = relative(curve**2, used)
    out = 1.0 - laws.rho[:, None] + laws.rho[:, None] * growth[:, None]
    if stated is not None and laws.tau.any():
        out += laws.tau[:, None] * (relative(stated, used)[:, None] - out)
    return np.asarray(np.maximum(out, 1e-12))


def relative(values: Floats, used: Bools) -> Floats:
    """Return values over their mean among the points used; ones where they vanish."""
    count = np.maximum(used.sum(axis=1), 1)
    mean = np.where(used, values, 0.0).sum(axis=1) / count
    safe = np.isfinite(mean) & (mean > 0)
    return np.asarray(np.where(safe[:, None], values / np.where(safe, mean, 1.0)[:, None], 1.0))


def weigh(laws: Laws, variance: Floats, used: Bools) -> Floats:
    """Return the weights (B, K, n) of points with those variances, capped; zero for points not used."""
    largest = np.where(used[:, None], variance, 0.0).max(axis=2)
    most = (laws.cap / np.maximum(largest, 1e-300))[:, :, None]
    return np.asarray(np.where(used[:, None], np.minimum(1.0 / variance, most), 0.0))
