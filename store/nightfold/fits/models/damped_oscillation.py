"""Damped oscillation: a cloud sloshing or breathing in its trap."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.models.oscillation import (
    AMPLITUDE,
    FREQUENCY_THETA,
    PHASE,
    PHASE_THETA,
    TWO_PI,
    Oscillation,
    Phased,
)
from nightfold.fits.models.shape import Derived, LineShape, Parameter, Theta

DECAY_THETA = Theta("decay_time", "decay", "reciprocal", power=-1, floor=True)


class DampedOscillation(Oscillation):
    """``A exp(-x / T) cos(2 pi f x + phi)``."""

    name: str = "damped-oscillation"
    formula: str = "amplitude exp(-x / decay_time) cos(2 pi frequency x + phase)"
    source: str = (
        "solution of z'' + 2 z'/T + (2 pi f0)^2 z = 0, f0^2 = frequency^2 + 1/(2 pi T)^2;"
        " Landau and Lifshitz, Mechanics (1976), section 25"
    )
    parameters: tuple[Parameter, ...] = (
        AMPLITUDE,
        Parameter("frequency", "frequency of the damped oscillation", "1/x"),
        Parameter("decay_time", "1/e time of the amplitude; infinite without damping", "x"),
        PHASE,
    )
    theta: tuple[Theta, ...] = (FREQUENCY_THETA, DECAY_THETA)
    derived: tuple[Derived, ...] = (
        Derived("undamped_frequency", "f0, f0^2 = frequency^2 + 1/(2 pi decay_time)^2", "1/x"),
        Derived("quality_factor", "pi f0 decay_time; infinite without damping", "", "reciprocal"),
    )
    power: int = 1

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, amplitude: float, frequency: float, decay_time: float, phase: float
    ) -> Floats:
        """Return the oscillation without background."""
        return amplitude * np.exp(-x / decay_time) * np.cos(TWO_PI * frequency * x + phase)

    def phased(self) -> LineShape:
        """Return the form with the phase as a coordinate."""
        return PhasedOscillation()

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return f0 and ``1 / Q = 1 / (pi f0 T)`` and their derivatives for f and 1 / T."""
        f, g = q[:, 1], q[:, 2]
        f0 = np.hypot(f, g / TWO_PI)
        dq = np.zeros((len(q), 2, q.shape[1]))
        with np.errstate(divide="ignore", invalid="ignore"):
            loss = g / (np.pi * f0)
            dq[:, 0, 1], dq[:, 0, 2] = f / f0, g / (TWO_PI**2 * f0)
            dq[:, 1, 1], dq[:, 1, 2] = -loss * f / f0**2, f**2 / (np.pi * f0**3)
        return np.stack([f0, loss], axis=1), dq


class PhasedOscillation(Phased, DampedOscillation):
    """The same with its phase as a coordinate."""

    theta: tuple[Theta, ...] = (FREQUENCY_THETA, DECAY_THETA, PHASE_THETA)
