"""Lorentzian line: a resonance broadened by a lifetime."""

from __future__ import annotations

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.resonance import Resonance


class Lorentzian(Resonance):
    """``A / (1 + (2 (x - c) / w)^2)``."""

    name: str = "lorentzian"
    formula: str = "amplitude / (1 + (2 (x - center) / fwhm)^2)"
    source: str = "H. A. Lorentz (1906); Demtröder, Laser Spectroscopy 1 (2014), section 3.1"

    @staticmethod
    def function(x: Floats, center: float, fwhm: float, amplitude: float) -> Floats:  # type: ignore[override]
        """Return the line without background."""
        return amplitude / (1.0 + (2.0 * (x - center) / fwhm) ** 2)

    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return ``L = 1 / (1 + 4 d^2)`` and ``-8 d L^2``."""
        del more
        line = 1.0 / (1.0 + 4.0 * d * d)
        return line, -8.0 * d * line * line
