"""Cosine: a fringe, or an oscillation that does not decay."""

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
from nightfold.fits.models.shape import LineShape, Parameter, Theta


class Cosine(Oscillation):
    """``A cos(2 pi f x + phi)``."""

    name: str = "cosine"
    formula: str = "amplitude cos(2 pi frequency x + phase)"
    source: str = "an oscillation without decay, or the fringe of an interferometer"
    parameters: tuple[Parameter, ...] = (AMPLITUDE, Parameter("frequency", "frequency", "1/x"), PHASE)
    theta: tuple[Theta, ...] = (FREQUENCY_THETA,)

    @staticmethod
    def function(x: Floats, amplitude: float, frequency: float, phase: float) -> Floats:  # type: ignore[override]
        """Return the oscillation without background."""
        return np.asarray(amplitude * np.cos(TWO_PI * frequency * x + phase))

    def phased(self) -> LineShape:
        """Return the form with the phase as a coordinate."""
        return PhasedCosine()


class PhasedCosine(Phased, Cosine):
    """The same with its phase as a coordinate."""

    theta: tuple[Theta, ...] = (FREQUENCY_THETA, PHASE_THETA)
