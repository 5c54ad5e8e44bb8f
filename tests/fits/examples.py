"""Example curves of every built-in model, with values that a scan can tell."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nightfold.fits.curve_function import evaluate
from nightfold.fits.engine.layout import Layout
from nightfold.fits.models import find_model
from nightfold.fits.models.shape import Background

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Example:
    model: str
    x: Array
    truth: dict[str, float]
    background: Background

    def curve(self, x: Array | None = None) -> Array:
        layout = Layout(find_model(self.model), self.background, frozenset())
        return evaluate(layout, self.x if x is None else x, self.truth)

    def noisy(self, seed: int, scatter: float, size: tuple[int, ...] = ()) -> Array:
        noise = np.random.default_rng(seed).normal(size=(*size, len(self.x)))
        y: Array = self.curve() + scatter * noise
        return y


FIELD = np.linspace(30.0, 36.0, 31)
TIME = np.linspace(0.0, 40.0, 33)
SHORT = np.linspace(0.02, 1.6, 40)
EXAMPLES = {
    "lorentzian": Example(
        "lorentzian", FIELD, {"center": 33.1, "fwhm": 1.2, "amplitude": -0.7, "offset": 1.1}, "flat"
    ),
    "gaussian": Example(
        "gaussian",
        FIELD,
        {"center": 32.4, "fwhm": 1.7, "amplitude": 0.9, "offset": 0.4, "slope": 0.05},
        "sloped",
    ),
    "exponential": Example("exponential", TIME, {"amplitude": 2.0, "lifetime": 12.0}, "none"),
    "two-body": Example("two-body", TIME, {"amplitude": 2.0, "two_body_rate": 0.2}, "none"),
    "three-body": Example("three-body", TIME, {"amplitude": 2.0, "three_body_rate": 0.3}, "none"),
    "damped-oscillation": Example(
        "damped-oscillation",
        SHORT,
        {"amplitude": 0.8, "frequency": 4.1, "decay_time": 0.9, "phase": 2.5, "offset": 1.0},
        "flat",
    ),
}
