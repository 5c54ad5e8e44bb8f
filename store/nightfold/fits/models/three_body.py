"""Three-body loss at constant temperature."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.loss import AMPLITUDE, BodyLoss
from nightfold.fits.models.shape import Parameter, Theta, rate

RATE = Parameter("three_body_rate", "initial loss rate, L3 times the mean squared density at x = 0", "1/x")


class ThreeBody(BodyLoss):
    """``amplitude / sqrt(1 + 2 three_body_rate x)``."""

    name: str = "three-body"
    formula: str = "amplitude / sqrt(1 + 2 three_body_rate x)"
    source: str = (
        "integrated dn/dt = -L3 n^3, three_body_rate = L3 <n^2>(0); Söding et al., Appl. Phys. B 69, 257"
        " (1999)"
    )
    parameters: tuple[Parameter, ...] = (AMPLITUDE, RATE)
    theta: tuple[Theta, ...] = (rate("three_body_rate"),)
    n: int = 2

    @staticmethod
    def function(x: Floats, amplitude: float, three_body_rate: float) -> Floats:  # type: ignore[override]
        """Return the decay without background."""
        return amplitude / np.sqrt(1.0 + 2.0 * three_body_rate * x)
