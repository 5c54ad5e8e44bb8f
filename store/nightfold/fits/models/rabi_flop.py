"""Rabi flopping from one state, with a decay to the mean."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.frame import Frame, Origin
from nightfold.fits.models.damped_oscillation import DECAY_THETA
from nightfold.fits.models.oscillation import FREQUENCY_THETA, TWO_PI, Oscillation
from nightfold.fits.models.shape import Derived, LineShape, Link, Parameter, Theta


class RabiFlop(Oscillation):
    """``C/2 (1 - exp(-x / T) cos(2 pi f x))``: the phase is that of a pulse of length x, zero at x = 0."""

    name: str = "rabi-flop"
    formula: str = "contrast/2 (1 - exp(-x / decay_time) cos(2 pi frequency x))"
    source: str = (
        "I. I. Rabi, Phys. Rev. 51, 652 (1937), for pulses of length x; the decay is a description"
        " (L. Allen and J. H. Eberly, Optical Resonance and Two-Level Atoms, 1975)"
    )
    parameters: tuple[Parameter, ...] = (
        Parameter("contrast", "from the level at x = 0 to that after a pi pulse, without decay", "y"),
        Parameter("frequency", "Rabi frequency", "1/x"),
        Parameter("decay_time", "1/e time of the oscillation; infinite without decay", "x"),
    )
    theta: tuple[Theta, ...] = (FREQUENCY_THETA, DECAY_THETA)
    linear: tuple[str | None, ...] = ("contrast",)
    origin: Origin = "zero"
    derived: tuple[Derived, ...] = (
        Derived("pi_time", "1 / (2 frequency), the length of a pi pulse", "x", "log"),
    )
    power: int = 1

    @staticmethod
    def function(x: Floats, contrast: float, frequency: float, decay_time: float) -> Floats:  # type: ignore[override]
        """Return the flopping without background."""
        return 0.5 * contrast * (1.0 - np.exp(-x / decay_time) * np.cos(TWO_PI * frequency * x))

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return this shape: each of its parameters is a coordinate or a coefficient."""
        return self

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the one column."""
        swing = self.envelope(u, theta) * np.cos(TWO_PI * theta[:, :1] * u)
        return (0.5 - 0.5 * swing)[:, None]

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``(1 - E cos) / 2`` with derivatives ``pi u E sin`` for f and ``u E cos / 2`` for g."""
        angle, decay = TWO_PI * theta[:, :1] * u, self.envelope(u, theta)
        swing = decay * np.cos(angle)
        derivatives = np.stack([np.pi * u * decay * np.sin(angle), 0.5 * u * swing], axis=1)
        return (0.5 - 0.5 * swing)[:, None], derivatives[:, :, None]

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return the coordinates of the parameters and their derivatives."""
        return LineShape.report(self, theta, c, frame)

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return LineShape.links(self)

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return ``-ln(2 f)`` and its derivative."""
        dq = np.zeros((len(q), 1, q.shape[1]))
        dq[:, 0, 1] = -1.0 / q[:, 1]
        return -np.log(2.0 * q[:, 1:2]), dq
