"""Two-body loss at constant temperature."""

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
    loss_bounds,
    rate,
    rate_grid,
    rate_near,
)


class TwoBody(LineShape):
    """``amplitude / (1 + two_body_rate x)``."""

    name: str = "two-body"
    formula: str = "amplitude / (1 + two_body_rate x)"
    source: str = (
        "integrated dn/dt = -L2 n^2, two_body_rate = L2 <n>(0); Weiner et al., Rev. Mod. Phys. 71, 1 (1999)"
    )
    kind: Kind = "time"
    default_background: Background = "none"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "value at x = 0, above the background", "y"),
        Parameter("two_body_rate", "initial loss rate, L2 times the mean density at x = 0", "1/x"),
    )
    theta: tuple[Theta, ...] = (rate("two_body_rate"),)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    @staticmethod
    def function(x: Floats, amplitude: float, two_body_rate: float) -> Floats:  # type: ignore[override]
        """Return the decay without background."""
        return amplitude / (1.0 + two_body_rate * x)

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``P = 1 / (1 + k u)`` and its derivative for ln k, ``-k u P^2``."""
        ku = np.exp(theta) * u
        decay = 1.0 / (1.0 + ku)
        return decay[:, None], (-ku * decay * decay)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return rates."""
        return rate_grid(window)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln rate."""
        return loss_bounds(window, 1.0)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)
