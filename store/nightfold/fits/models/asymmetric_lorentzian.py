"""Lorentzian with two half widths: a resonance with a longer wing to one side."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.resonance import CENTER, FWHM, PEAK, Resonance
from nightfold.fits.models.shape import Parameter, Theta, Window

LARGEST = 0.98
"""Largest asymmetry that is searched."""
TRIED = 0.5


class AsymmetricLorentzian(Resonance):
    """``A / (1 + ((x - c) / h)^2)`` with h = w/2 (1 + a) above the center and w/2 (1 - a) below it.

    Curve and slope are continuous at the center, the curvature is not. The coordinate of a is the logarithm
    of the ratio of the half widths, t = ln((1 + a) / (1 - a)), in which an interval stays within (-1, 1).
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

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``L = 1 / (1 + (2 d / b)^2)``, b = 1 ± a, with derivatives for d and t.

        They are ``-2 e L^2 (2 / b)``, e = 2 d / b, and ``2 e^2 L^2 dln(b)/dt``, dln(b)/dt = ±(1 ∓ a) / 2.
        """
        a = np.tanh(more / 2.0)
        above = d >= 0.0
        steep = np.where(above, 2.0 / (1.0 + a), 2.0 / (1.0 - a))
        e = d * steep
        line = 1.0 / (1.0 + e * e)
        common = 2.0 * e * line * line
        return line, -common * steep, common * e * np.where(above, 0.5 * (1.0 - a), -0.5 * (1.0 + a))

    def further(self) -> Floats:
        """Return two asymmetries; the line between them looks much like either."""
        reach = 2.0 * np.arctanh(TRIED)
        return np.array([[-reach], [reach]])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of center, ln width and t."""
        low, high = super().bounds(window)
        most = 2.0 * np.arctanh(LARGEST)
        return np.append(low, -most), np.append(high, most)
