"""Ramsey fringes over the dark time, with a Gaussian loss of contrast."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.frame import Origin
from nightfold.fits.models.oscillation import (
    AMPLITUDE,
    FREQUENCY_THETA,
    PHASE,
    PHASE_THETA,
    TWO_PI,
    Oscillation,
    Phased,
)
from nightfold.fits.models.shape import LineShape, Parameter, Theta

DECAY_THETA = Theta("decay_time", "decay", "inverse-root", power=-2, floor=True)


class Ramsey(Oscillation):
    """``A exp(-(x / T)^2) cos(2 pi f x + phi)``, fitted in ``1 / T^2``.

    The decay counts from x = 0, so x does too.
    """

    name: str = "ramsey"
    formula: str = "amplitude exp(-(x / decay_time)^2) cos(2 pi frequency x + phase)"
    source: str = (
        "N. F. Ramsey, Phys. Rev. 78, 695 (1950); the decay is that of a detuning which is constant in a shot and"
        " normally distributed from shot to shot, with standard deviation 1/(sqrt(2) pi T)"
    )
    parameters: tuple[Parameter, ...] = (
        AMPLITUDE,
        Parameter("frequency", "frequency of the fringe, the detuning", "1/x"),
        Parameter("decay_time", "1/e time of the contrast; infinite without decay", "x"),
        PHASE,
    )
    theta: tuple[Theta, ...] = (FREQUENCY_THETA, DECAY_THETA)
    origin: Origin = "zero"
    power: int = 2

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, amplitude: float, frequency: float, decay_time: float, phase: float
    ) -> Floats:
        """Return the fringe without background."""
        return amplitude * np.exp(-((x / decay_time) ** 2)) * np.cos(TWO_PI * frequency * x + phase)

    def phased(self) -> LineShape:
        """Return the form with the phase as a coordinate."""
        return PhasedRamsey()


class PhasedRamsey(Phased, Ramsey):
    """The same with its phase as a coordinate."""

    theta: tuple[Theta, ...] = (FREQUENCY_THETA, DECAY_THETA, PHASE_THETA)
