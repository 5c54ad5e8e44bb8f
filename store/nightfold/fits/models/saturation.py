"""Saturation: a response that levels off."""

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
    rate_near,
)


class Saturation(LineShape):
    """``A x / (x + s)``: half of A at x = s."""

    name: str = "saturation"
    formula: str = "amplitude x / (x + saturation_point)"
    source: str = (
        "scattering of a two-level atom on resonance, x the intensity; H. J. Metcalf and P. van der Straten,"
        " Laser Cooling and Trapping (1999), chapter 2"
    )
    kind: Kind = "time"
    default_background: Background = "none"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "level far beyond the saturation point, above the background", "y"),
        Parameter("saturation_point", "x at which half of it is reached", "x"),
    )
    theta: tuple[Theta, ...] = (Theta("saturation_point", "rate", "log", power=1),)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    @staticmethod
    def function(x: Floats, amplitude: float, saturation_point: float) -> Floats:  # type: ignore[override]
        """Return the response without background."""
        return amplitude * x / (x + saturation_point)

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``u / (u + s)`` and its derivative for ln s, ``-s u / (u + s)^2``."""
        s = np.exp(theta)
        share = u / (u + s)
        return share[:, None], (-s * share / (u + s))[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return ln s from a twentieth of the finest spacing to twenty times the largest x."""
        low, high = self.bounds(window)
        first = max(np.log(0.05 * window.finest), low[0])
        return np.linspace(first, min(np.log(20.0), high[0]), 28)[:, None]

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln s; for x below zero the pole at x = -s stays off the points."""
        low, high = np.log(1e-3 * window.finest), np.log(300.0)
        if window.low < 0:
            low = max(low, np.log(1.01 * -window.low))
        return np.array([low]), np.array([high])

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)
