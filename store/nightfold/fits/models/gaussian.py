"""Gaussian line: a resonance broadened by a spread of many small causes."""

from __future__ import annotations

import math

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

FOUR_LN2 = 4.0 * math.log(2.0)


class Gaussian(LineShape):
    """``A exp(-4 ln 2 ((x - c) / w)^2)``."""

    name: str = "gaussian"
    formula: str = "amplitude exp(-4 ln 2 ((x - center) / fwhm)^2)"
    source: str = "C. F. Gauss (1809); Demtröder, Laser Spectroscopy 1 (2014), section 3.2"
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
        return np.asarray(amplitude * np.exp(-FOUR_LN2 * ((x - center) / fwhm) ** 2))

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``G``, with derivatives ``8 ln2 d G / w`` and (ln w) ``8 ln2 d^2 G``, d = (u - c) / w."""
        scale = np.exp(-theta[:, 1:])
        d = (u - theta[:, :1]) * scale
        line = np.exp(-FOUR_LN2 * d * d)
        common = 2.0 * FOUR_LN2 * d * line
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
