"""One-body and three-body loss together, at constant temperature."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.loss import AMPLITUDE, ONE_BODY_RATE, HeldRates, MixedLoss, partial_loss
from nightfold.fits.models.shape import LineShape, Parameter, Theta
from nightfold.fits.models.three_body import RATE


class OneThreeBody(MixedLoss):
    """``A exp(-g x) / sqrt(1 + k (1 - exp(-2 g x)) / g)``."""

    name: str = "one-three-body"
    formula: str = (
        "amplitude exp(-g x) / sqrt(1 + k (1 - exp(-2 g x)) / g), g = one_body_rate, k = three_body_rate"
    )
    source: str = (
        "integrated dn/dt = -g n - L3 n^3, three_body_rate = L3 <n^2>(0);"
        " Söding et al., Appl. Phys. B 69, 257 (1999)"
    )
    parameters: tuple[Parameter, ...] = (AMPLITUDE, ONE_BODY_RATE, RATE)
    theta: tuple[Theta, ...] = (
        Theta("three_body_rate", "free", "not-negative"),
        Theta("one_body_rate", "free", "not-negative", floor=True, ceiling=True),
    )
    n: int = 2
    body_rate: str = "three_body_rate"

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, amplitude: float, one_body_rate: float, three_body_rate: float
    ) -> Floats:
        """Return the decay without background."""
        loss, _ = partial_loss(
            np.asarray(one_body_rate, dtype=np.float64), np.asarray(x, dtype=np.float64), 2
        )
        return amplitude * np.exp(-one_body_rate * x) / np.sqrt(1.0 + three_body_rate * loss)

    def held(self, names: frozenset[str]) -> LineShape:
        """Return the form with rates of those names fixed."""
        return HeldOneThreeBody(names)


class HeldOneThreeBody(HeldRates, OneThreeBody):
    """The same with its rates as coordinates."""
