"""What all oscillations share: frequency, decay, phase, and their start grid."""

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
AMPLITUDE = Parameter("amplitude", "amplitude at x = 0, positive", "y")
PHASE = Parameter("phase", "phase at x = 0, in (-pi, pi]", "rad")
FREQUENCY_THETA = Theta("frequency", "frequency", power=-1)
PHASE_THETA = Theta("phase", "angle")


class Oscillation(LineShape):
    """``A E(x) cos(2 pi f x + phi)`` with A > 0, phi in (-pi, pi] and ``E = exp(-g x^power)``, or E = 1.

    Two linear columns, ``E cos(2 pi f u)`` and ``E sin(2 pi f u)``; A and phi at x = 0 follow. No damping (g = 0, an
    infinite decay time) is a value like any other.
    """

    kind: Kind = "time"
    default_background: Background = "flat"
    linear: tuple[str | None, ...] = (None, None)
    origin: Origin = "first"
    power: int = 0
    """Power of x in the decay; 0 without."""

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form with the phase as a coordinate when amplitude or phase is fixed."""
        return self.phased() if fixed & {"amplitude", "phase"} else self

    def phased(self) -> LineShape:
        """Return the form with the phase as a coordinate."""
        raise NotImplementedError

    def envelope(self, u: Floats, theta: Floats) -> Floats:
        """Return E, (M, n), or ones (1, 1) without decay."""
        if self.power == 0:
            return np.ones((1, 1))
        return np.asarray(np.exp(-theta[:, 1:2] * u**self.power))

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the cosine and the sine column."""
        angle = TWO_PI * theta[:, :1] * u
        decay = self.envelope(u, theta)
        columns = np.empty((len(theta), 2, u.shape[1]))
        np.multiply(decay, np.cos(angle), out=columns[:, 0])
        np.multiply(decay, np.sin(angle), out=columns[:, 1])
        return columns

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return C and S; derivatives for f are ``-2 pi u S``, ``2 pi u C``, for g ``-u^power`` times C and S."""
        columns = self.columns(u, theta)
        derivatives = np.empty((len(theta), theta.shape[1], 2, u.shape[1]))
        turn = TWO_PI * u
        np.multiply(columns[:, 1], -turn, out=derivatives[:, 0, 0])
        np.multiply(columns[:, 0], turn, out=derivatives[:, 0, 1])
        if self.power:
            np.multiply(columns, -(u[:, None] ** self.power), out=derivatives[:, 1])
        return columns, derivatives

    def grid(self, window: Window) -> Floats:
        """Return frequencies an eighth of 1/window apart, with decays.

        Long scans are searched up to the Nyquist frequency of the bins the grid sees; beyond it `start` helps.
        """
        spacing = max(window.spacing, window.span / MOST_BINS)
        searched = max(0.5 / spacing, min(1.0 / spacing, MOST_PERIODS / window.span))
        highest = min(highest_frequency(window), searched)
        frequencies = np.arange(0.25 / window.span, highest * (1 + 1e-9), 0.125 / window.span)
        if self.power == 0:
            return frequencies[:, None]
        decays = np.array([0.0, 1.0, 4.0**self.power]) / self.reach(window)
        f, g = np.meshgrid(frequencies, decays, indexing="ij")
        return np.column_stack([f.ravel(), g.ravel()])

    def reach(self, window: Window) -> float:
        """Return by how much ``x^power`` changes within the window."""
        ends = [window.low**self.power, window.high**self.power]
        if window.low < 0 < window.high:
            ends.append(0.0)
        return max(ends) - min(ends)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of frequency and damping."""
        low, high = [0.05 / window.span], [highest_frequency(window)]
        if self.power:
            low, high = [*low, 0.0], [*high, 30.0**self.power / self.reach(window)]
        return np.array(low), np.array(high)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two frequencies lead to the same minimum: half a line of the window apart."""
        return np.asarray(np.abs(one[..., 0] - other[..., 0]) <= 0.5)

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return (amplitude, frequency, damping if any, phase) at x = 0 and their derivatives.

        ``A = ys |c| exp(g x0 / xs)`` for an exponential decay, which counts from the first point, otherwise
        ``ys |c|``; ``phi = atan2(-c_sin, c_cos) - 2 pi f x0 / xs``.
        """
        size, rows = len(self.theta), len(self.parameters)
        q, dq = np.zeros((len(theta), rows)), np.zeros((len(theta), rows, size + c.shape[1]))
        for j, coordinate in enumerate(self.theta):
            offset, slope = coordinate.line(frame)
            q[:, 1 + j] = offset + slope * theta[:, j]
            dq[:, 1 + j, j] = slope
        back = frame.x0 / frame.xs
        length = np.hypot(c[:, 0], c[:, 1])
        safe = np.where(length > 0, length, 1.0)
        with np.errstate(over="ignore", invalid="ignore"):
            growth = frame.ys * (np.exp(theta[:, 1] * back) if self.power == 1 else 1.0)
            q[:, 0] = growth * length
            if self.power == 1:
                dq[:, 0, 1] = q[:, 0] * back
            dq[:, 0, size : size + 2] = growth[:, None] * c[:, :2] / safe[:, None]
        q[:, -1] = wrap(np.arctan2(-c[:, 1], c[:, 0]) - TWO_PI * theta[:, 0] * back)
        dq[:, -1, 0] = -TWO_PI * back
        dq[:, -1, size], dq[:, -1, size + 1] = c[:, 1] / safe**2, -c[:, 0] / safe**2
        return q, dq

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return ("linear", *(coordinate.link for coordinate in self.theta), "linear")


class Phased(Oscillation):
    """The same oscillation with its phase as a coordinate, counted from x = 0, for fixed amplitude or phase.

    With the phase fixed the amplitude takes whichever sign fits. Stands before a shape among the bases of a class.
    """

    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the one column."""
        return self.basis(u, theta)[0]

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return the column and its derivatives for f, g and phase."""
        angle = TWO_PI * theta[:, :1] * u + theta[:, -1:]
        decay = self.envelope(u, theta)
        column, quadrature = decay * np.cos(angle), decay * np.sin(angle)
        damping = [-(u**self.power) * column] if self.power else []
        derivatives = np.stack([-TWO_PI * u * quadrature, *damping, -quadrature], axis=1)
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
        turn = np.abs(np.angle(np.exp(1j * (one[..., -1] - other[..., -1]))))
        return np.asarray(super().near(one, other) & (turn < 1.0))

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return the coordinates of the parameters and their derivatives, the phase wrapped."""
        q, dq = LineShape.report(self, theta, c, frame)
        q[:, -1] = wrap(q[:, -1])
        return q, dq

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return LineShape.links(self)


def highest_frequency(window: Window) -> float:
    """Return the Nyquist frequency of the finest spacing, at most twice that of the mean one."""
    return min(0.5 / window.finest, 1.0 / window.spacing)


def wrap(angle: Floats) -> Floats:
    """Return angles in (-pi, pi]."""
    return np.asarray(np.pi - np.mod(np.pi - angle, TWO_PI))
