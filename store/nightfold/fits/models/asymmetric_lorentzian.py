"""Lorentzian with two half widths: a resonance with a longer wing to one side."""

from __future__ import annotations

import math

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame
from nightfold.fits.models.resonance import CENTER, FWHM, PEAK, Resonance
from nightfold.fits.models.shape import LineShape, Parameter, Theta, Window

LARGEST = 0.98
"""Largest asymmetry that is searched when the width is fixed."""
TRIED = 2.0 * math.atanh(0.5)
"""Logarithm of the ratio of half widths in the grid; the line between its two signs looks much like either."""


class AsymmetricLorentzian(Resonance):
    """``A / (1 + ((x - c) / h)^2)`` with h = w/2 (1 + a) above the center and w/2 (1 - a) below it.

    Curve and slope are continuous at the center, the curvature is not. Coordinates are the logarithms of the two half
    widths: where one side is missing, one of them is open and nothing else. An interval of the asymmetry is symmetric
    in the logarithm of their ratio, and so stays within (-1, 1).
    """

    name: str = "asymmetric-lorentzian"
    formula: str = (
        "amplitude / (1 + ((x - center) / h)^2), h = fwhm/2 (1 + asymmetry) above the center,"
        " fwhm/2 (1 - asymmetry) below"
    )
    source: str = "two half Lorentzians of one height joined at the center; a description, not a theory"
    parameters: tuple[Parameter, ...] = (
        *PEAK,
        Parameter("asymmetry", "difference of the half widths above and below over their sum"),
    )
    theta: tuple[Theta, ...] = (CENTER, FWHM, Theta("asymmetry", "free", "asymmetry"))

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, center: float, fwhm: float, amplitude: float, asymmetry: float
    ) -> Floats:
        """Return the line without background."""
        half = 0.5 * fwhm * np.where(np.asarray(x) >= center, 1.0 + asymmetry, 1.0 - asymmetry)
        return np.asarray(amplitude / (1.0 + ((x - center) / half) ** 2))

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form with width and asymmetry as coordinates when one of them is fixed."""
        return AsymmetryAndWidth() if fixed & {"fwhm", "asymmetry"} else self

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``L = 1 / (1 + e^2)``, e = (u - c) / h, with derivatives ``2 e L^2 / h``, (ln h) ``2 e^2 L^2``."""
        d = u - theta[:, :1]
        above = d >= 0.0
        scale = np.where(above, np.exp(-theta[:, 1:2]), np.exp(-theta[:, 2:3]))
        e = d * scale
        line = 1.0 / (1.0 + e * e)
        common = 2.0 * e * line * line
        derivatives = np.empty((len(theta), 3, 1, u.shape[1]))
        np.multiply(common, scale, out=derivatives[:, 0, 0])
        common *= e
        np.multiply(common, above, out=derivatives[:, 1, 0])
        np.multiply(common, ~above, out=derivatives[:, 2, 0])
        return line[:, None], derivatives

    def grid(self, window: Window) -> Floats:
        """Return centers and pairs of half widths."""
        theta = super().grid(window)
        theta[:, 1:] = half_widths(theta[:, 1], theta[:, 2])
        return theta

    def further(self) -> Floats:
        """Return the ratios of half widths that the grid tries, as logarithms."""
        return np.array([[-TRIED], [TRIED]])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of center and ln half widths."""
        low, high = super().bounds(window)
        half = math.log(2.0)
        return np.append(low, low[1]) - [0.0, half, half], np.append(high, high[1]) - [0.0, half, half]

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum, as for a symmetric line of the whole width."""
        wholes = [np.stack([t[..., 0], np.logaddexp(t[..., 1], t[..., 2])], axis=-1) for t in (one, other)]
        return super().near(*wholes)

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return coordinates of what is given; of a width without an asymmetry, as for a symmetric line."""
        theta = super().place(values, frame)
        if "fwhm" in values:
            theta[:, 1:] = half_widths(theta[:, 1], np.nan_to_num(theta[:, 2]))
        else:
            theta[:, 2] = np.nan
        return theta

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return center, ln of the sum of the half widths, amplitude, ln of their ratio, and their derivatives."""
        q, dq = super().report(theta, c, frame)
        whole = np.logaddexp(theta[:, 1], theta[:, 2])
        q[:, 1], q[:, 3] = whole + np.log(frame.xs), theta[:, 1] - theta[:, 2]
        dq[:, 1, 1], dq[:, 1, 2] = np.exp(theta[:, 1] - whole), np.exp(theta[:, 2] - whole)
        dq[:, 3, 1], dq[:, 3, 2] = 1.0, -1.0
        return q, dq

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``L = 1 / (1 + (2 d / b)^2)``, b = 1 ± a, with derivatives for d and t, a = tanh(t / 2).

        They are ``-2 e L^2 (2 / b)``, e = 2 d / b, and ``2 e^2 L^2 dln(b)/dt``, dln(b)/dt = ±(1 ∓ a) / 2.
        """
        a = np.tanh(more / 2.0)
        above = d >= 0.0
        steep = np.where(above, 2.0 / (1.0 + a), 2.0 / (1.0 - a))
        e = d * steep
        line = 1.0 / (1.0 + e * e)
        common = 2.0 * e * line * line
        return line, -common * steep, common * e * np.where(above, 0.5 * (1.0 - a), -0.5 * (1.0 + a))


class AsymmetryAndWidth(AsymmetricLorentzian):
    """The same line with ln width and ln ratio of the half widths as coordinates."""

    form = Resonance.form
    basis = Resonance.basis
    grid = Resonance.grid
    near = Resonance.near
    place = Resonance.place
    report = Resonance.report

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of center, ln width and ln ratio."""
        low, high = Resonance.bounds(self, window)
        most = 2.0 * math.atanh(LARGEST)
        return np.append(low, -most), np.append(high, most)


def half_widths(ln_width: Floats, ln_ratio: Floats) -> Floats:
    """Return the logarithms of the half widths above and below the center, (…, 2)."""
    whole = np.logaddexp(0.0, ln_ratio)
    return np.stack([ln_width + ln_ratio - whole, ln_width - whole], axis=-1)
