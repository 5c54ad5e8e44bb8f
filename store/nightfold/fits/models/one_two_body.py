"""One-body and two-body loss together, at constant temperature."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.loss import AMPLITUDE, ONE_BODY_RATE, HeldRates, MixedLoss, partial_loss
from nightfold.fits.models.shape import LineShape, Parameter, Theta
from nightfold.fits.models.two_body import RATE


class OneTwoBody(MixedLoss):
    """``A exp(-g x) / (1 + k (1 - exp(-g x)) / g)``."""

    name: str = "one-two-body"
    formula: str = "amplitude exp(-g x) / (1 + k (1 - exp(-g x)) / g), g = one_body_rate, k = two_body_rate"
    source: str = (
        "integrated dn/dt = -g n - L2 n^2, two_body_rate = L2 <n>(0);"
        " Weiner et al., Rev. Mod. Phys. 71, 1 (1999)"
    )
    parameters: tuple[Parameter, ...] = (AMPLITUDE, ONE_BODY_RATE, RATE)
    theta: tuple[Theta, ...] = (
        Theta("two_body_rate", "free", "not-negative"),
        Theta("one_body_rate", "free", "not-negative", floor=True, ceiling=True),
    )
    n: int = 1
    body_rate: str = "two_body_rate"

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, amplitude: float, one_body_rate: float, two_body_rate: float
    ) -> Floats:
        """Return the decay without background."""
        loss, _ = partial_loss(
            np.asarray(one_body_rate, dtype=np.float64), np.asarray(x, dtype=np.float64), 1
        )
        return amplitude * np.exp(-one_body_rate * x) / (1.0 + two_body_rate * loss)

    def held(self, names: frozenset[str]) -> LineShape:
        """Return the form with rates of those names fixed."""
        return HeldOneTwoBody(names)


class HeldOneTwoBody(HeldRates, OneTwoBody):
    """The same with its rates as coordinates."""
