"""Line of a two-level system driven by a square pi pulse."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.resonance import PEAK, QUALITY, Resonance
from nightfold.fits.models.shape import Derived, Parameter, Window

WIDTH = 2.0 * 0.7986853552847
"""The full width at half maximum in units of the Rabi frequency."""
HALF_PI = np.pi / 2.0


class RabiLine(Resonance):
    """``A sin^2(pi/2 sqrt(1 + u^2)) / (1 + u^2)``, u = (x - c) / O, with the width w = 1.597 O."""

    name: str = "rabi-line"
    formula: str = (
        "amplitude sin^2(pi/2 sqrt(1 + u^2)) / (1 + u^2), u = (x - center) / O, fwhm = 1.5973707105694 O"
    )
    source: str = (
        "I. I. Rabi, Phys. Rev. 51, 652 (1937), for a pi pulse on resonance; O is the Rabi frequency"
    )
    parameters: tuple[Parameter, ...] = (
        PEAK[0],
        Parameter("fwhm", "full width at half maximum of the central line, 1.597 Rabi frequencies", "x"),
        PEAK[2],
    )
    derived: tuple[Derived, ...] = (
        QUALITY,
        Derived("rabi_frequency", "Rabi frequency O, in the unit of x", "x", "log"),
        Derived("pulse_time", "1 / (2 O), the length of the pi pulse for x a frequency", "1/x", "log"),
    )

    @staticmethod
    def function(x: Floats, center: float, fwhm: float, amplitude: float) -> Floats:  # type: ignore[override]
        """Return the line without background."""
        square = 1.0 + (WIDTH * (x - center) / fwhm) ** 2
        return np.asarray(amplitude * np.sin(HALF_PI * np.sqrt(square)) ** 2 / square)

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``sin^2(pi r / 2) / r^2``, r^2 = 1 + u^2, u = 1.597 d, and its derivative.

        For u it is ``u (pi/2 sin(pi r) / r^3 - 2 sin^2(pi r / 2) / r^4)``.
        """
        del more
        u = WIDTH * d
        square = 1.0 + u * u
        r = np.sqrt(square)
        sine, cosine = np.sin(HALF_PI * r), np.cos(HALF_PI * r)
        line = sine * sine / square
        return line, WIDTH * u * (np.pi * sine * cosine / r - 2.0 * line) / square

    def narrowest(self, window: Window) -> float:
        """Return the narrowest width of the grid: far side lobes, taken coarsely, would look like any line."""
        return max(super().narrowest(window), window.spacing / 3)

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return logarithms of quality factor, Rabi frequency and length of the pulse, and their derivatives."""
        first, dq_first = super().derive(q)
        ln_rabi = q[:, 1:2] - np.log(WIDTH)
        dq = np.zeros((len(q), 3, q.shape[1]))
        dq[:, :1] = dq_first
        dq[:, 1, 1], dq[:, 2, 1] = 1.0, -1.0
        return np.concatenate([first, ln_rabi, -np.log(2.0) - ln_rabi], axis=1), dq
