"""Voigt line: a Lorentzian broadened by a Gaussian spread."""

from __future__ import annotations

import math

import numpy as np

from nightfold.fits.engine.arrays import AnyArray, Floats
from nightfold.fits.models.resonance import CENTER, FWHM, PEAK, QUALITY, Resonance
from nightfold.fits.models.shape import Derived, Parameter, Theta, Window

TAIL = 1.0 - 2.0 * 0.5346
"""Of ``w = 0.5346 f_L + sqrt(0.2166 f_L^2 + f_G^2)`` follows ``f_G^2 = w^2 (1 - m) (1 + TAIL m)``.

0.2166 stands for 0.4654^2, so that a line without Gaussian part is as wide as its Lorentzian.
"""
EIGHT_LN2 = 8.0 * math.log(2.0)
FAR = 12.0
"""Beyond this |z| the asymptotic series, to twelve terms, is exact to rounding, and its derivatives too."""
TERMS = 12


class Voigt(Resonance):
    """``A V(x - c) / V(0)``: total width w, of which the share m = f_L / w is Lorentzian.

    The curve is smooth in m up to both ends, a Gaussian (0) and a Lorentzian (1), which are values like any other.
    """

    name: str = "voigt"
    formula: str = (
        "amplitude V(x - center) / V(0), V a Lorentzian of width f_L = lorentzian_share fwhm convolved with a"
        " Gaussian of width f_G, fwhm = 0.5346 f_L + sqrt(0.2166 f_L^2 + f_G^2)"
    )
    source: str = (
        "width: J. J. Olivero and R. L. Longbothum, J. Quant. Spectrosc. Radiat. Transfer 17, 233 (1977), good to"
        " 0.02 %; V by the Faddeeva function of SciPy (S. G. Johnson)"
    )
    parameters: tuple[Parameter, ...] = (
        *PEAK,
        Parameter("lorentzian_share", "Lorentzian width over the full width, 0 to 1"),
    )
    theta: tuple[Theta, ...] = (
        CENTER,
        FWHM,
        Theta("lorentzian_share", "free", "share", floor=True, ceiling=True),
    )
    derived: tuple[Derived, ...] = (
        QUALITY,
        Derived("lorentzian_fwhm", "full width at half maximum of the Lorentzian part", "x", "not-negative"),
        Derived("gaussian_fwhm", "full width at half maximum of the Gaussian part", "x", "root"),
    )

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, center: float, fwhm: float, amplitude: float, lorentzian_share: float
    ) -> Floats:
        """Return the line without background."""
        d = np.atleast_1d((np.asarray(x, dtype=np.float64) - center) / fwhm)
        share = np.array([[min(max(float(lorentzian_share), 0.0), 1.0)]])
        line = profile_of(d.reshape(1, -1), share)[0]
        return np.asarray(amplitude * line.reshape(np.shape(x)))

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``V(d) / V(0)`` and its derivatives for d and the share."""
        return profile_of(d, more)

    def templates(self, u: Floats, theta: Floats) -> Floats:
        """Return the mean of a Lorentzian and a Gaussian of the same width, each by its share."""
        square = ((u - theta[:, :1]) * np.exp(-theta[:, 1:2])) ** 2
        share = theta[:, 2:3]
        line = share / (1.0 + 4.0 * square) + (1.0 - share) * np.exp(-4.0 * math.log(2.0) * square)
        return np.asarray(line[:, None])

    def further(self) -> Floats:
        """Return one share: every Voigt line looks much like it."""
        return np.array([[0.5]])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of center, ln width and share."""
        low, high = super().bounds(window)
        return np.append(low, 0.0), np.append(high, 1.0)

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return ln quality factor, ``f_L = m w``, ``f_G^2 = w^2 (1 - m) (1 + TAIL m)`` and derivatives."""
        first, dq_first = super().derive(q)
        m, w = q[:, 3], np.exp(q[:, 1])
        square = w**2 * (1.0 - m) * (1.0 + TAIL * m)
        dq = np.zeros((len(q), 3, q.shape[1]))
        dq[:, :1] = dq_first
        dq[:, 1, 1], dq[:, 1, 3] = m * w, w
        dq[:, 2, 1], dq[:, 2, 3] = 2.0 * square, w**2 * (TAIL - 1.0 - 2.0 * TAIL * m)
        return np.column_stack([first, m * w, square]), dq


def profile_of(d: Floats, share: Floats) -> tuple[Floats, Floats, Floats]:
    """Return ``S = Re F(d + i g) / Re F(i g)`` and its derivatives for d and the share m, (M, n) each.

    ``F`` is the integral of a Gaussian of variance s over ``i / zeta``; with the width as the unit of d, g = m / 2
    and ``s = (1 - m)(1 + TAIL m) / (8 ln 2)``. F obeys ``dF/ds = F'' / 2`` and depends on d and g through ``d + i g``
    alone, so all derivatives follow from those for zeta.
    """
    half = 0.5 * share
    variance = (1.0 - share) * (1.0 + TAIL * share) / EIGHT_LN2
    variance_slope = (TAIL - 1.0 - 2.0 * TAIL * share) / EIGHT_LN2
    zeta = np.concatenate([d, np.zeros((len(d), 1))], axis=1) + 1j * half
    f, f1, f2 = faddeeva(zeta, variance)
    by_share = -0.5 * f1.imag + 0.5 * variance_slope * f2.real
    top = f.real[:, -1:]
    line = f.real[:, :-1] / top
    return line, f1.real[:, :-1] / top, (by_share[:, :-1] - line * by_share[:, -1:]) / top


def faddeeva(zeta: AnyArray, variance: Floats) -> tuple[AnyArray, AnyArray, AnyArray]:
    """Return ``F = sqrt(pi / (2 s)) w(zeta / sqrt(2 s))`` and its first two derivatives for complex zeta.

    Near, ``w' = 2i/sqrt(pi) - 2 z w`` and ``w'' = -2 w - 2 z w'``; far, where these cancel, and for s = 0, the series
    ``F = sum_k i (2k-1)!! s^k / zeta^(2k+1)`` (Abramowitz and Stegun, 7.1.23).
    """
    from scipy.special import wofz

    variance = np.broadcast_to(variance, zeta.shape)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        far = np.abs(zeta) ** 2 > 2.0 * FAR**2 * variance
        scale = 1.0 / np.sqrt(2.0 * np.where(far, 1.0, variance))
        z = np.where(far, 0.0, zeta) * scale
        w = wofz(z)
        w1 = 2j / math.sqrt(math.pi) - 2.0 * z * w
        w2 = -2.0 * w - 2.0 * z * w1
        root = math.sqrt(math.pi) * scale
        f, f1, f2 = root * w, root * scale * w1, root * scale**2 * w2
    if far.any():
        f[far], f1[far], f2[far] = _far(zeta[far], variance[far])
    return f, f1, f2


def _far(zeta: AnyArray, variance: Floats) -> tuple[AnyArray, AnyArray, AnyArray]:
    """Return F and its first two derivatives by the asymptotic series."""
    ratio = variance / zeta**2
    term = np.ones_like(zeta)
    f, f1, f2 = np.zeros_like(zeta), np.zeros_like(zeta), np.zeros_like(zeta)
    for k in range(TERMS):
        f += term
        f1 -= (2 * k + 1) * term
        f2 += (2 * k + 1) * (2 * k + 2) * term
        term = term * (2 * k + 1) * ratio
    front = 1j / zeta
    return front * f, front * f1 / zeta, front * f2 / zeta**2
