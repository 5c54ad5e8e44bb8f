"""Damped oscillation: a cloud sloshing or breathing in its trap."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame, Origin
from nightfold.fits.engine.reduction import MOST_BINS
from nightfold.fits.models.shape import (
    Background,
    Kind,
    LineShape,
    Link,
    Parameter,
    Theta,
    Window,
)

TWO_PI = 2.0 * np.pi
MOST_PERIODS = 200
"""Unevenly taken scans are searched beyond the mean Nyquist frequency up to this many periods."""
FREQUENCY = Theta("frequency", "frequency", power=-1)
DECAY = Theta("decay_time", "decay", "reciprocal", power=-1, floor=True)
PHASE = Theta("phase", "angle")


class DampedOscillation(LineShape):
    """``A exp(-x / T) cos(2 pi f x + phi)`` with A > 0 and phi in (-pi, pi].

    Two linear columns, ``exp(-g u) cos(2 pi f u)`` and ``exp(-g u) sin(2 pi f u)``, counted from the first
    point; A and phi at x = 0 follow. No damping (g = 0, an infinite decay time) is a value like any other.
    """

    name: str = "damped-oscillation"
    formula: str = "amplitude exp(-x / decay_time) cos(2 pi frequency x + phase)"
    source: str = (
        "solution of z'' + 2 z'/T + (2 pi f0)^2 z = 0, f0^2 = frequency^2 + 1/(2 pi T)^2;"
        " Landau and Lifshitz, Mechanics (1976), section 25"
    )
    kind: Kind = "time"
    default_background: Background = "flat"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "amplitude at x = 0, positive", "y"),
        Parameter("frequency", "frequency of the damped oscillation", "1/x"),
        Parameter("decay_time", "1/e time of the amplitude; infinite without damping", "x"),
        Parameter("phase", "phase at x = 0, in (-pi, pi]", "rad"),
    )
    theta: tuple[Theta, ...] = (FREQUENCY, DECAY)
    linear: tuple[str | None, ...] = (None, None)
    origin: Origin = "first"

    @staticmethod
    def function(  # type: ignore[override]
        x: Floats, amplitude: float, frequency: float, decay_time: float, phase: float
    ) -> Floats:
        """Return the oscillation without background."""
        return amplitude * np.exp(-x / decay_time) * np.cos(TWO_PI * frequency * x + phase)

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form with the phase as a coordinate when amplitude or phase is fixed."""
        return PhasedOscillation() if fixed & {"amplitude", "phase"} else self

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the cosine and the sine column."""
        angle = TWO_PI * theta[:, :1] * u
        decay = np.exp(-theta[:, 1:2] * u)
        columns = np.empty((len(theta), 2, u.shape[1]))
        np.multiply(decay, np.cos(angle), out=columns[:, 0])
        np.multiply(decay, np.sin(angle), out=columns[:, 1])
        return columns

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return C and S; derivatives for f are ``-2 pi u S``, ``2 pi u C``, for g ``-u C``, ``-u S``."""
        columns = self.columns(u, theta)
        derivatives = np.empty((len(theta), 2, 2, u.shape[1]))
        turn = TWO_PI * u
        np.multiply(columns[:, 1], -turn, out=derivatives[:, 0, 0])
        np.multiply(columns[:, 0], turn, out=derivatives[:, 0, 1])
        np.multiply(columns, -u[:, None], out=derivatives[:, 1])
        return columns, derivatives

    def grid(self, window: Window) -> Floats:
        """Return frequencies an eighth of 1/window apart, three decays.

        Long scans are searched up to the Nyquist frequency of the bins the grid sees; beyond it `start` helps.
        """
        spacing = max(window.spacing, window.span / MOST_BINS)
        searched = max(0.5 / spacing, min(1.0 / spacing, MOST_PERIODS / window.span))
        highest = min(highest_frequency(window), searched)
        frequencies = np.arange(0.25 / window.span, highest * (1 + 1e-9), 0.125 / window.span)
        decays = np.array([0.0, 1.0, 4.0]) / window.span
        f, g = np.meshgrid(frequencies, decays, indexing="ij")
        return np.column_stack([f.ravel(), g.ravel()])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of frequency and damping."""
        return np.array([0.05 / window.span, 0.0]), np.array([highest_frequency(window), 30.0 / window.span])

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two frequencies lead to the same minimum: half a line of the window apart."""
        return np.asarray(np.abs(one[..., 0] - other[..., 0]) <= 0.5)

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return (amplitude, frequency, damping, phase) at x = 0 and their derivatives."""
        return report_oscillation(theta, c, frame)

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return ("linear", "linear", "reciprocal", "linear")


class PhasedOscillation(DampedOscillation):
    """The same oscillation with its phase as a coordinate, counted from x = 0, for fixed amplitude or phase.

    With the phase fixed the amplitude takes whichever sign fits.
    """

    theta: tuple[Theta, ...] = (FREQUENCY, DECAY, PHASE)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the one column."""
        return self.basis(u, theta)[0]

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return the column and its derivatives for f, g and phase."""
        angle = TWO_PI * theta[:, :1] * u + theta[:, 2:3]
        decay = np.exp(-theta[:, 1:2] * u)
        column, quadrature = decay * np.cos(angle), decay * np.sin(angle)
        derivatives = np.stack([-TWO_PI * u * quadrature, -u * column, -quadrature], axis=1)
        return column[:, None], derivatives[:, :, None]

    def grid(self, window: Window) -> Floats:
        """Return frequencies and decays, each with eight phases."""
        plain = super().grid(window)
        phases = np.arange(-3, 5) * np.pi / 4
        return np.column_stack([np.repeat(plain, len(phases), axis=0), np.tile(phases, len(plain))])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of frequency, damping and phase."""
        low, high = super().bounds(window)
        return np.append(low, -20 * np.pi), np.append(high, 20 * np.pi)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        turn = np.abs(np.angle(np.exp(1j * (one[..., 2] - other[..., 2]))))
        return np.asarray(super().near(one, other) & (turn < 1.0))

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return (amplitude, frequency, damping, phase) and their derivatives, the phase wrapped."""
        q, dq = LineShape.report(self, theta, c, frame)
        q[:, 3] = wrap(q[:, 3])
        return q, dq


def highest_frequency(window: Window) -> float:
    """Return the Nyquist frequency of the finest spacing, at most twice that of the mean one."""
    return min(0.5 / window.finest, 1.0 / window.spacing)


def wrap(angle: Floats) -> Floats:
    """Return angles in (-pi, pi]."""
    return np.asarray(np.pi - np.mod(np.pi - angle, TWO_PI))


def report_oscillation(theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
    """Return amplitude and phase at x = 0 from the two coefficients at the first point.

    ``A = ys |c| exp(g x0 / xs)`` and ``phi = atan2(-c_sin, c_cos) - 2 pi f x0 / xs``.
    """
    q, dq = np.zeros((len(theta), 4)), np.zeros((len(theta), 4, 2 + c.shape[1]))
    for row, (j, coordinate) in zip((1, 2), enumerate((FREQUENCY, DECAY)), strict=True):
        offset, slope = coordinate.line(frame)
        q[:, row] = offset + slope * theta[:, j]
        dq[:, row, j] = slope
    back = frame.x0 / frame.xs
    size = np.hypot(c[:, 0], c[:, 1])
    safe = np.where(size > 0, size, 1.0)
    with np.errstate(over="ignore", invalid="ignore"):
        growth = frame.ys * np.exp(theta[:, 1] * back)
        q[:, 0] = growth * size
        dq[:, 0, 1] = q[:, 0] * back
        dq[:, 0, 2:4] = growth[:, None] * c[:, :2] / safe[:, None]
    q[:, 3] = wrap(np.arctan2(-c[:, 1], c[:, 0]) - TWO_PI * theta[:, 0] * back)
    dq[:, 3, 0] = -TWO_PI * back
    dq[:, 3, 2], dq[:, 3, 3] = c[:, 1] / safe**2, -c[:, 0] / safe**2
    return q, dq
