"""Gaussian line: a resonance broadened by a spread of many small causes."""

from __future__ import annotations

import math

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.resonance import Resonance

FOUR_LN2 = 4.0 * math.log(2.0)


class Gaussian(Resonance):
    """``A exp(-4 ln 2 ((x - c) / w)^2)``."""

    name: str = "gaussian"
    formula: str = "amplitude exp(-4 ln 2 ((x - center) / fwhm)^2)"
    source: str = "C. F. Gauss (1809); Demtröder, Laser Spectroscopy 1 (2014), section 3.2"

    @staticmethod
    def function(x: Floats, center: float, fwhm: float, amplitude: float) -> Floats:  # type: ignore[override]
        """Return the line without background."""
        return np.asarray(amplitude * np.exp(-FOUR_LN2 * ((x - center) / fwhm) ** 2))

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``G = exp(-4 ln 2 d^2)`` and ``-8 ln 2 d G``."""
        del more
        line = np.exp(-FOUR_LN2 * d * d)
        return line, -2.0 * FOUR_LN2 * d * line
