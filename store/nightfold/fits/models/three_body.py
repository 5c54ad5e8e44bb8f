"""Three-body loss at constant temperature."""

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


class ThreeBody(LineShape):
    """``amplitude / sqrt(1 + 2 three_body_rate x)``."""

    name: str = "three-body"
    formula: str = "amplitude / sqrt(1 + 2 three_body_rate x)"
    source: str = (
        "integrated dn/dt = -L3 n^3, three_body_rate = L3 <n^2>(0); Söding et al., Appl. Phys. B 69, 257"
        " (1999)"
    )
    kind: Kind = "time"
    default_background: Background = "none"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "value at x = 0, above the background", "y"),
        Parameter("three_body_rate", "initial loss rate, L3 times the mean squared density at x = 0", "1/x"),
    )
    theta: tuple[Theta, ...] = (rate("three_body_rate"),)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    @staticmethod
    def function(x: Floats, amplitude: float, three_body_rate: float) -> Floats:  # type: ignore[override]
        """Return the decay without background."""
        return amplitude / np.sqrt(1.0 + 2.0 * three_body_rate * x)

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``Q = (1 + 2 k u)^(-1/2)`` and its derivative for ln k, ``-k u Q^3``."""
        ku = np.exp(theta) * u
        decay = 1.0 / np.sqrt(1.0 + 2.0 * ku)
        return decay[:, None], (-ku * decay**3)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return rates."""
        return rate_grid(window)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln rate."""
        return loss_bounds(window, 2.0)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)
