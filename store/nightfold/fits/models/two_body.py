"""Two-body loss at constant temperature."""

from __future__ import annotations

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.loss import AMPLITUDE, BodyLoss
from nightfold.fits.models.shape import Parameter, Theta, rate

RATE = Parameter("two_body_rate", "initial loss rate, L2 times the mean density at x = 0", "1/x")


class TwoBody(BodyLoss):
    """``amplitude / (1 + two_body_rate x)``."""

    name: str = "two-body"
    formula: str = "amplitude / (1 + two_body_rate x)"
    source: str = (
        "integrated dn/dt = -L2 n^2, two_body_rate = L2 <n>(0); Weiner et al., Rev. Mod. Phys. 71, 1 (1999)"
    )
    parameters: tuple[Parameter, ...] = (AMPLITUDE, RATE)
    theta: tuple[Theta, ...] = (rate("two_body_rate"),)
    n: int = 1

    @staticmethod
    def function(x: Floats, amplitude: float, two_body_rate: float) -> Floats:  # type: ignore[override]
        """Return the decay without background."""
        return amplitude / (1.0 + two_body_rate * x)
