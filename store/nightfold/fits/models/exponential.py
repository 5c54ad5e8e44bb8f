"""Exponential decay (or, with a negative amplitude and a flat background, loading)."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame, Origin
from nightfold.fits.models.loss import HALF_LIFE
from nightfold.fits.models.shape import (
    Background,
    Derived,
    Kind,
    LineShape,
    Parameter,
    Theta,
    Window,
    lifetime,
    rate_bounds,
    rate_grid,
    rate_near,
)


class Exponential(LineShape):
    """``A exp(-x / T)``.

    Counted from the first point, so that a scan that starts late is as well conditioned as one that starts
    at zero; the amplitude reported is the one at x = 0.
    """

    name: str = "exponential"
    formula: str = "amplitude exp(-x / lifetime)"
    source: str = "E. Rutherford and F. Soddy (1902); one-body loss dN/dt = -N / lifetime"
    kind: Kind = "time"
    default_background: Background = "none"
    parameters: tuple[Parameter, ...] = (
        Parameter("amplitude", "value at x = 0, above the background", "y"),
        Parameter("lifetime", "1/e time", "x"),
    )
    theta: tuple[Theta, ...] = (lifetime("lifetime"),)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "first"
    derived: tuple[Derived, ...] = (HALF_LIFE,)

    @staticmethod
    def function(x: Floats, amplitude: float, lifetime: float) -> Floats:  # type: ignore[override]
        """Return the decay without background."""
        return amplitude * np.exp(-x / lifetime)

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return this decay, counted from x = 0 when the amplitude there is fixed."""
        return ExponentialFromZero() if "amplitude" in fixed else self

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``E = exp(-r u)`` and its derivative for ln r, ``-r u E``."""
        exponent = -np.exp(theta) * u
        decay = np.exp(exponent)
        return decay[:, None], (exponent * decay)[:, None, None]

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return (amplitude at x = 0, ln lifetime) and derivatives; A = c exp(r x0 / xs)."""
        q, dq = super().report(theta, c, frame)
        with np.errstate(over="ignore", invalid="ignore"):
            back = np.exp(theta[:, 0]) * frame.x0 / frame.xs
            growth = np.exp(back)
            q[:, 0] *= growth
            dq[:, 0, 1] *= growth
            dq[:, 0, 0] = q[:, 0] * back
        return q, dq

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return the logarithm of ``lifetime ln 2`` and its derivative for ln lifetime."""
        dq = np.zeros((len(q), 1, 2))
        dq[:, 0, 1] = 1.0
        return q[:, 1:2] + np.log(np.log(2.0)), dq

    def grid(self, window: Window) -> Floats:
        """Return rates."""
        return rate_grid(window)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln rate."""
        return rate_bounds(window)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)


class ExponentialFromZero(Exponential):
    """The same decay, counted from x = 0."""

    origin: Origin = "zero"
