"""Landau-Zener transfer over the sweep rate."""

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


class LandauZener(LineShape):
    """``A (1 - exp(-r / |x|))``, x the sweep rate; A where it is zero."""

    name: str = "landau-zener"
    formula: str = "amplitude (1 - exp(-characteristic_rate / |x|)), x the sweep rate"
    source: str = (
        "C. Zener, Proc. R. Soc. Lond. A 137, 696 (1932): characteristic_rate = pi^2 f_R^2 for x in Hz/s and a"
        " Rabi frequency f_R in Hz"
    )
    kind: Kind = "time"
    default_background: Background = "flat"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "height of an infinitely slow sweep above an infinitely fast one", "y"),
        Parameter("characteristic_rate", "sweep rate at which 1 - 1/e is transferred", "x"),
    )
    theta: tuple[Theta, ...] = (Theta("characteristic_rate", "rate", "log", power=1),)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    @staticmethod
    def function(x: Floats, amplitude: float, characteristic_rate: float) -> Floats:  # type: ignore[override]
        """Return the transfer without background."""
        with np.errstate(divide="ignore"):
            ratio = np.divide(characteristic_rate, np.abs(x))
        return np.asarray(-amplitude * np.expm1(-ratio))

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``1 - exp(-r / |u|)`` and its derivative for ln r, ``r / |u| exp(-r / |u|)``."""
        with np.errstate(divide="ignore"):
            ratio = np.minimum(np.exp(theta) / np.abs(u), 700.0)
        return -np.expm1(-ratio)[:, None], (ratio * np.exp(-ratio))[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return ln r from a tenth of the finest spacing to ten times the fastest sweep."""
        return np.linspace(np.log(0.1 * window.finest), np.log(10.0), 28)[:, None]

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln r."""
        return np.array([np.log(1e-3 * window.finest)]), np.array([np.log(1e3)])

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)
