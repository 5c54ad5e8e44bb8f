"""Free expansion: the size of a cloud over the time of flight."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame, Origin
from nightfold.fits.models.shape import (
    Background,
    Derived,
    Kind,
    LineShape,
    Link,
    Parameter,
    Theta,
    Window,
)

MOST_SHRINKING = -0.9
"""Smallest (v x / s0)^2 at the largest |x|: beyond zero, so that no expansion lies within what is searched."""
ENDS = np.array([-6.0, -3.0, -1.5, -0.7, -0.25, 0.0, 0.2, 0.4, 0.6, 0.8, 0.9, 0.95, 0.98, 0.995, 1.0])


class Expansion(LineShape):
    """``s0 sqrt(1 + (v x / s0)^2)``, sizes and velocity rms.

    The coordinate t is the share of v^2 x^2 in the squared size at the largest |x|, S the size there:
    ``S sqrt(1 - t + t u^2)``. It is negative when a cloud shrinks, which noise can do: the velocity is then an upper
    limit, with the square of it reported with its sign. Intervals are those of s0^2 and v^2.
    """

    name: str = "expansion"
    formula: str = "initial_size sqrt(1 + (velocity x / initial_size)^2)"
    source: str = (
        "ballistic expansion of a thermal cloud, velocity = sqrt(k T / m); Ketterle, Durfee and Stamper-Kurn,"
        " arXiv:cond-mat/9904034 (1999)"
    )
    kind: Kind = "time"
    default_background: Background = "none"
    parameters: tuple[Parameter, ...] = (
        Parameter("initial_size", "rms size at x = 0", "y"),
        Parameter("velocity", "rms velocity; zero when its square comes out negative", "y/x"),
    )
    theta: tuple[Theta, ...] = (Theta("velocity", "free", "root", ceiling=True),)
    linear: tuple[str | None, ...] = (None,)
    origin: Origin = "zero"
    derived: tuple[Derived, ...] = (
        Derived("velocity_squared", "square of the velocity, negative for a cloud that shrinks", "(y/x)^2"),
    )

    @staticmethod
    def function(x: Floats, initial_size: float, velocity: float) -> Floats:  # type: ignore[override]
        """Return the size without background."""
        return np.hypot(initial_size, velocity * np.asarray(x))

    def curve(self, x: Floats, values: dict[str, float]) -> Floats:
        """Return the size; where the square of the velocity is known to be negative, of a cloud that shrinks."""
        square = values.get("velocity_squared", 0.0)
        if square >= 0.0:
            return super().curve(x, values)
        return np.asarray(np.sqrt(np.maximum(values["initial_size"] ** 2 + square * np.square(x), 0.0)))

    @property
    def positive(self) -> frozenset[str]:
        """Names of the parameters that must be greater than zero."""
        return frozenset({"initial_size", "velocity"})

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form whose coefficient is the fixed one of size and velocity."""
        if "initial_size" in fixed:
            return ExpansionOfSize()
        return ExpansionOfVelocity() if "velocity" in fixed else self

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``r = sqrt(1 - t + t u^2)`` and its derivative for t, ``(u^2 - 1) / (2 r)``."""
        square = u * u - 1.0
        size = np.sqrt(np.maximum(1.0 + theta * square, 1e-12))
        return size[:, None], (0.5 * square / size)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return shares, from shrinking to a point at x = 0."""
        del window
        return ENDS[:, None].copy()

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of the share."""
        del window
        return np.array([MOST_SHRINKING / (1.0 + MOST_SHRINKING)]), np.array([1.0])

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return True: there is but one minimum."""
        return np.ones(np.broadcast_shapes(one.shape, other.shape)[:-1], dtype=bool)

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return the share when both size and velocity are given."""
        theta = np.full((len(frame.xs), 1), np.nan)
        if {"initial_size", "velocity"} <= set(values):
            grown = (values["velocity"] * frame.xs) ** 2
            theta[:, 0] = grown / (values["initial_size"] ** 2 + grown)
        return theta

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return ``s0^2 = S^2 (1 - t)`` and ``v^2 = S^2 t`` and their derivatives."""
        end, share = frame.ys * c[:, 0], theta[:, 0]
        shares = np.stack([1.0 - share, share / frame.xs**2], axis=1)
        q, dq = end[:, None] ** 2 * shares, np.zeros((len(theta), 2, 1 + c.shape[1]))
        dq[:, 0, 0], dq[:, 1, 0] = -(end**2), (end / frame.xs) ** 2
        dq[:, :, 1] = (2.0 * end * frame.ys)[:, None] * shares
        return q, dq

    def links(self) -> tuple[Link, ...]:
        """Return that both are roots of their coordinates."""
        return ("root", "root")

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return v^2 and its derivative."""
        dq = np.zeros((len(q), 1, q.shape[1]))
        dq[:, 0, 1] = 1.0
        return q[:, 1:2].copy(), dq


class ExpansionOfSize(Expansion):
    """``s0 sqrt(1 + w x^2)`` with the coordinate w = (v / s0)^2, for a fixed s0."""

    linear: tuple[str | None, ...] = ("initial_size",)
    theta: tuple[Theta, ...] = (Theta("velocity", "free", "root"),)

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return this form."""
        return self

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``r = sqrt(1 + w u^2)`` and its derivative for w, ``u^2 / (2 r)``."""
        square = u * u
        size = np.sqrt(np.maximum(1.0 + theta * square, 1e-12))
        return size[:, None], (0.5 * square / size)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return growths from shrinking to a thousandfold size."""
        del window
        return np.concatenate([[-0.8, -0.4, 0.0], np.geomspace(0.3, 1e6, 20)])[:, None]

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of w."""
        del window
        return np.array([MOST_SHRINKING]), np.array([1e8])

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return w when both size and velocity are given."""
        theta = np.full((len(frame.xs), 1), np.nan)
        if {"initial_size", "velocity"} <= set(values):
            theta[:, 0] = (values["velocity"] * frame.xs / values["initial_size"]) ** 2
        return theta

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return ``s0^2`` and ``v^2 = s0^2 w`` and their derivatives."""
        size, growth = frame.ys * c[:, 0], theta[:, 0] / frame.xs**2
        q, dq = np.zeros((len(theta), 2)), np.zeros((len(theta), 2, 1 + c.shape[1]))
        q[:, 0], q[:, 1] = size**2, size**2 * growth
        dq[:, 1, 0] = (size / frame.xs) ** 2
        dq[:, 0, 1], dq[:, 1, 1] = 2.0 * size * frame.ys, 2.0 * size * frame.ys * growth
        return q, dq


class ExpansionOfVelocity(Expansion):
    """``v sqrt(p + x^2)`` with the coordinate ln p, p = (s0 / v)^2, for a fixed v."""

    linear: tuple[str | None, ...] = ("velocity",)
    theta: tuple[Theta, ...] = (Theta("initial_size", "free", "root"),)

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return this form."""
        return self

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``r = sqrt(p + u^2)`` and its derivative for ln p, ``p / (2 r)``."""
        p = np.exp(theta)
        size = np.sqrt(p + u * u)
        return size[:, None], (0.5 * p / size)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return ln p."""
        del window
        return np.linspace(np.log(1e-6), np.log(1e6), 29)[:, None]

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln p."""
        del window
        return np.array([np.log(1e-10)]), np.array([np.log(1e10)])

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return nan: the velocity, a coefficient, is what is given."""
        del values
        return np.full((len(frame.xs), 1), np.nan)

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return ``s0^2 = v^2 p`` and ``v^2`` and their derivatives."""
        velocity, p = frame.ys * c[:, 0] / frame.xs, np.exp(theta[:, 0]) * frame.xs**2
        q, dq = np.zeros((len(theta), 2)), np.zeros((len(theta), 2, 1 + c.shape[1]))
        q[:, 0], q[:, 1] = velocity**2 * p, velocity**2
        slope = 2.0 * velocity * frame.ys / frame.xs
        dq[:, 0, 0], dq[:, 0, 1], dq[:, 1, 1] = q[:, 0], slope * p, slope
        return q, dq
