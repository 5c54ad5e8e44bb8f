"""Lorentzian line: a resonance broadened by a lifetime."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Origin
from nightfold.fits.models.shape import (
    Background,
    Kind,
    LineShape,
    Parameter,
    Theta,
    Window,
    peak_bounds,
    peak_grid,
    peak_near,
    position,
    width,
)


class Lorentzian(LineShape):
    """``A / (1 + (2 (x - c) / w)^2)``."""

    name: str = "lorentzian"
    formula: str = "amplitude / (1 + (2 (x - center) / fwhm)^2)"
    source: str = "H. A. Lorentz (1906); Demtröder, Laser Spectroscopy 1 (2014), section 3.1"
    kind: Kind = "resonance"
    default_background: Background = "flat"
    parameters: tuple[Parameter, ...] = (
        Parameter("center", "position of the line", "x"),
        Parameter("fwhm", "full width at half maximum", "x"),
        Parameter("amplitude", "height above the background; negative for a dip", "y"),
    )
    theta: tuple[Theta, ...] = (position("center"), width("fwhm"))
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "middle"

    @staticmethod
    def function(x: Floats, center: float, fwhm: float, amplitude: float) -> Floats:  # type: ignore[override]
        """Return the line without background."""
        return amplitude / (1.0 + (2.0 * (x - center) / fwhm) ** 2)

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``L = 1 / (1 + d^2)``, with derivatives ``4 d L^2 / w`` and (ln w) ``2 d^2 L^2``."""
        scale = 2.0 * np.exp(-theta[:, 1:])
        d = (u - theta[:, :1]) * scale
        line = 1.0 / (1.0 + d * d)
        common = 2.0 * d * line * line
        derivatives = np.empty((len(theta), 2, 1, u.shape[1]))
        np.multiply(common, scale, out=derivatives[:, 0, 0])
        np.multiply(common, d, out=derivatives[:, 1, 0])
        return line[:, None], derivatives

    def grid(self, window: Window) -> Floats:
        """Return centers and widths."""
        return peak_grid(window)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of center and ln width."""
        return peak_bounds(window)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return peak_near(one, other)
