"""What all losses share: rates, the pole before x = 0, and the times to 1/e and to a half."""

from __future__ import annotations

from math import factorial
from typing import Final

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
    loss_bounds,
    rate,
    rate_grid,
    rate_near,
)

AMPLITUDE = Parameter("amplitude", "value at x = 0, above the background", "y")
ONE_BODY_RATE = Parameter("one_body_rate", "rate of the loss that does not depend on density", "1/x")
HALF_LIFE = Derived("half_life", "x at which half of the amplitude is left", "x", "log")
TIMES: Final = (
    Derived("one_over_e_time", "x at which 1/e of the amplitude is left", "x", "log"),
    HALF_LIFE,
)
FRACTIONS = (np.e, 2.0)
SMALL = 0.3
"""Below this the series of a derivative is more exact than its closed form."""
SERIES = [(-1.0) ** j * j / factorial(j + 1) for j in range(12, 0, -1)]
"""Coefficients of the derivative of (1 - exp(-t)) / t, the highest power first."""
SMALLER = 1e-4


class BodyLoss(LineShape):
    """``A (1 + n k x)^(-1/n)``, the solution of ``dN/dt = -k N^(n+1)`` in units of N(0): n + 1 bodies at once."""

    kind: Kind = "time"
    default_background: Background = "none"
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"
    derived: tuple[Derived, ...] = TIMES
    n: int

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``D^(-1/n)``, D = 1 + n k u, and its derivative for ln k, ``-k u D^(-1/n - 1)``."""
        ku = np.exp(theta) * u
        base = 1.0 + self.n * ku
        decay = 1.0 / (base if self.n == 1 else np.sqrt(base))
        return decay[:, None], (-ku * decay / base)[:, None, None]

    def grid(self, window: Window) -> Floats:
        """Return rates."""
        return rate_grid(window)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln rate."""
        return loss_bounds(window, float(self.n))

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return rate_near(one, other)

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return logarithms of ``(b^n - 1) / (n k)``, b = e and 2, and their derivatives for ln k."""
        values = np.stack([np.log((b**self.n - 1.0) / self.n) - q[:, 1] for b in FRACTIONS], axis=1)
        dq = np.zeros((len(q), 2, q.shape[1]))
        dq[:, :, 1] = -1.0
        return values, dq


class MixedLoss(LineShape):
    """``A exp(-g x) (1 + k (1 - exp(-n g x)) / g)^(-1/n)``: one body and n + 1 bodies at once.

    Coordinates are ln R, R = g + k the loss rate at x = 0, and the share s = k / R: both ends, one loss
    alone, are values like any other.
    """

    kind: Kind = "time"
    default_background: Background = "none"
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "zero"
    derived: tuple[Derived, ...] = TIMES
    n: int
    body_rate: str
    """Name of k."""

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form whose coordinates are the rates themselves when one of them is fixed."""
        held = fixed & {"one_body_rate", self.body_rate}
        return self.held(held) if held else self

    def held(self, names: frozenset[str]) -> LineShape:
        """Return the form with rates of those names fixed."""
        raise NotImplementedError

    def rates(self, theta: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Return g and k, (M, 1), and their derivatives for theta, (M, 2)."""
        total, share = np.exp(theta[:, :1]), theta[:, 1:2]
        one = np.concatenate([total * (1.0 - share), -total], axis=1)
        body = np.concatenate([total * share, total], axis=1)
        return one[:, :1], body[:, :1], one, body

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return the decay and its derivatives.

        With ``p = (1 - exp(-n g u)) / g`` and D = 1 + k p, f = exp(-g u) D^(-1/n):
        ``df/dk = -f p / (n D)`` and ``df/dg = -f (u + k p_g / (n D))``.
        """
        g, k, by_one, by_body = self.rates(theta)
        p, p_g = partial_loss(g, u, self.n)
        base = 1.0 + k * p
        decay = np.exp(-g * u) / (base if self.n == 1 else np.sqrt(base))
        for_k = -decay * p / (self.n * base)
        for_g = -decay * (u + k * p_g / (self.n * base))
        derivatives = by_one[:, :, None] * for_g[:, None] + by_body[:, :, None] * for_k[:, None]
        return decay[:, None], derivatives[:, :, None]

    def grid(self, window: Window) -> Floats:
        """Return total rates, each with four shares."""
        rates, shares = rate_grid(window), np.array([0.1, 0.4, 0.7, 0.95])
        return np.column_stack([np.repeat(rates[:, 0], len(shares)), np.tile(shares, len(rates))])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of ln R and the share."""
        low, high = loss_bounds(window, float(self.n))
        return np.append(low, 0.0), np.append(high, 1.0)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum, which the share alone does not change."""
        return rate_near(one, other)

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return ln R and the share when both rates are given."""
        theta = np.full((len(frame.xs), 2), np.nan)
        if {"one_body_rate", self.body_rate} <= set(values):
            g, k = values["one_body_rate"], values[self.body_rate]
            theta[:, 0] = np.log((g + k) * frame.xs)
            theta[:, 1] = k / (g + k)
        return theta

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return amplitude, g and k and their derivatives."""
        g, k, by_one, by_body = self.rates(theta)
        q, dq = np.zeros((len(theta), 3)), np.zeros((len(theta), 3, 2 + c.shape[1]))
        q[:, 0], dq[:, 0, 2] = frame.ys * c[:, 0], frame.ys
        scale = 1.0 / frame.xs[:, None]
        q[:, 1:2], q[:, 2:3] = g * scale, k * scale
        dq[:, 1, :2], dq[:, 2, :2] = by_one * scale, by_body * scale
        return q, dq

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return ("linear", "not-negative", "not-negative")

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return the logarithms of the times at which 1/e and a half are left, and their derivatives.

        They are ``ln(1 + t) / (n g)``, t = (b^n - 1) g / (g + k), b = e and 2.
        """
        g, k = np.maximum(q[:, 1], 0.0), np.maximum(q[:, 2], 0.0)
        total = np.maximum(g + k, 1e-300)
        values, dq = np.zeros((len(q), 2)), np.zeros((len(q), 2, q.shape[1]))
        for j, b in enumerate(FRACTIONS):
            reach = b**self.n - 1.0
            t = reach * g / total
            small = t < SMALLER
            safe = np.where(small, 1.0, t)
            part = np.where(small, 1.0 - t / 2.0, np.log1p(safe) / safe)
            slope = np.where(small, -0.5 + 5.0 * t / 12.0, 1.0 / ((1.0 + safe) * np.log1p(safe)) - 1.0 / safe)
            values[:, j] = np.log(reach / self.n) - np.log(total) + np.log(part)
            dq[:, j, 1] = -1.0 / total + slope * reach * k / total**2
            dq[:, j, 2] = -1.0 / total - slope * reach * g / total**2
        return values, dq


class HeldRates(MixedLoss):
    """The same loss with g and k themselves as coordinates, for fixed rates; one that is free as its logarithm.

    Stands before a shape among the bases of a class.
    """

    def __init__(self, held: frozenset[str]) -> None:
        names = ("one_body_rate", self.body_rate)
        self.theta = tuple(
            Theta(n, "rate", "not-negative", power=-1) if n in held else rate(n) for n in names
        )

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return this form."""
        return self

    def rates(self, theta: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Return g and k and their derivatives for theta."""
        logs = np.array([t.link == "log" for t in self.theta])
        values = np.where(logs, np.exp(np.where(logs, theta, 0.0)), theta)
        slopes = np.where(logs, values, 1.0)
        one, body = slopes * np.array([1.0, 0.0]), slopes * np.array([0.0, 1.0])
        return values[:, :1], values[:, 1:], one, body

    def grid(self, window: Window) -> Floats:
        """Return rates, on the diagonal."""
        return np.repeat(rate_grid(window), 2, axis=1)

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds of the rates; a fixed one takes none."""
        low, high = loss_bounds(window, float(self.n))
        return np.repeat(low, 2), np.repeat(high, 2)

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum."""
        return np.asarray(np.abs(one - other).max(axis=-1) <= 1.5)

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return the coordinates of the rates given."""
        return LineShape.place(self, values, frame)

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return the coordinates of the parameters and their derivatives."""
        return LineShape.report(self, theta, c, frame)

    def links(self) -> tuple[Link, ...]:
        """Return how the reported parameters follow from q."""
        return LineShape.links(self)

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return the times as of the rates, by the chain rule where a rate is fitted as its logarithm."""
        logs = np.array([link == "log" for link in self.links()])
        with np.errstate(over="ignore"):
            rates = np.where(logs, np.exp(np.where(logs, q, 0.0)), q)
        values, dq = super().derive(rates)
        return values, dq * np.where(logs, rates, 1.0)[:, None]


def partial_loss(g: Floats, u: Floats, n: int) -> tuple[Floats, Floats]:
    """Return ``(1 - exp(-n g u)) / g`` and its derivative for g, exact for small g too.

    With t = n g u they are ``n u h(t)`` and ``(n u)^2 h'(t)``, h = (1 - exp(-t)) / t.
    """
    reach = n * u
    t = g * reach
    fall = np.expm1(-t)
    safe = np.where(t == 0, 1.0, t)
    h = np.where(t == 0, 1.0, -fall / safe)
    slope = np.asarray(((1.0 + fall) * (1.0 + t) - 1.0) / safe**2)
    small = np.abs(t) < SMALL
    slope[small] = np.polyval(SERIES, t[small])
    return reach * h, reach * reach * slope
