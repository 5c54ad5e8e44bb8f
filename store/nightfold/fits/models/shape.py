"""What every line shape provides, and the coordinates its parameters are fitted in."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Literal

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame, Origin
from nightfold.fits.engine.links import to_coordinate

Link = Literal["linear", "log", "reciprocal", "root", "inverse-root", "not-negative", "share", "asymmetry"]
"""How a value follows from its coordinate q, always monotonic: q; exp(q); 1/q; the root of q, zero below zero;
1/sqrt(q); q, zero below zero; q kept in 0 … 1; tanh(q/2), with q the logarithm of a ratio."""
Kind = Literal["resonance", "time"]
Background = Literal["none", "flat", "sloped"]
UNITY = "1"
"""Name of a column whose coefficient is one (a part of the model no coefficient scales)."""


@dataclass(frozen=True)
class Parameter:
    """One reported parameter: its name, what it means, and its unit as a pattern of x and y (``y/x``)."""

    name: str
    meaning: str
    unit: str = ""


@dataclass(frozen=True)
class Derived(Parameter):
    """A number that follows from the reported parameters of a fit; `link` as in `Theta`."""

    link: Link = "linear"


@dataclass(frozen=True)
class Theta:
    """One nonlinear coordinate of the fit and the reported parameter it carries.

    The reported value is ``link^-1(q)`` with ``q = offset + slope * theta``; q is where intervals are
    symmetric. ``power`` tells how q depends on the scale of x, ``sign`` the sign of a logarithm,
    ``shifted`` whether the origin of x counts, ``floor`` and ``ceiling`` whether its lower and upper bound are
    values in their own right (no damping) and not failures.
    """

    name: str
    role: Literal["position", "width", "rate", "frequency", "decay", "angle", "free"]
    link: Link = "linear"
    sign: int = 1
    power: int = 0
    shifted: bool = False
    floor: bool = False
    ceiling: bool = False

    def line(self, frame: Frame) -> tuple[Floats, Floats]:
        """Return offset and slope of q as a function of theta, one a data set."""
        if self.link == "log":
            return self.power * np.log(frame.xs), np.full(len(frame.xs), float(self.sign))
        slope = frame.xs ** float(self.power)
        return (frame.x0 if self.shifted else np.zeros(len(slope))), slope

    def from_value(self, value: float, frame: Frame) -> Floats:
        """Return theta for a reported value, one a data set."""
        offset, slope = self.line(frame)
        return np.asarray((to_coordinate(np.array(value), self.link) - offset) / slope)

    @property
    def positive(self) -> bool:
        """Whether the reported parameter must be greater than zero."""
        return self.link in ("log", "reciprocal", "inverse-root") or self.role == "frequency"


def position(name: str) -> Theta:
    """Return the coordinate of a place on the x axis."""
    return Theta(name, "position", power=1, shifted=True)


def width(name: str) -> Theta:
    """Return the coordinate (ln w) of a width on the x axis."""
    return Theta(name, "width", "log", sign=1, power=1)


def lifetime(name: str) -> Theta:
    """Return the coordinate (ln rate) of a time on the x axis."""
    return Theta(name, "rate", "log", sign=-1, power=1)


def rate(name: str) -> Theta:
    """Return the coordinate (ln rate) of a rate, in units of 1/x."""
    return Theta(name, "rate", "log", sign=1, power=-1)


@dataclass(frozen=True)
class Window:
    """What a start grid needs to know of the x values, in units of the frame.

    ``spacing`` is the mean distance of neighbours, ``finest`` the smallest, ``distinct`` their number.
    """

    low: float
    high: float
    spacing: float
    finest: float
    distinct: int
    background: Background

    @property
    def span(self) -> float:
        """Width of the window."""
        return self.high - self.low


class LineShape(ABC):
    """A line shape: formula, source, columns, derivatives, start grid, units.

    ``theta`` are its nonlinear coordinates, ``linear`` the reported names of its linear columns (None
    where a column is no reported parameter by itself). A coordinate that belongs to several reported parameters
    bears the name of one of them; `place` and `report` then translate.
    """

    name: str
    formula: str
    source: str
    kind: Kind
    default_background: Background
    parameters: tuple[Parameter, ...]
    theta: tuple[Theta, ...]
    linear: tuple[str | None, ...]
    origin: Origin
    derived: tuple[Derived, ...] = ()
    searchable: bool = True
    """Whether a global start grid exists (built-in shapes); otherwise `grid` holds given starts."""
    numeric: bool = False
    """Whether the shape is known by its values only: `gradient` then says how it changes with theta."""

    @staticmethod
    @abstractmethod
    def function(x: Floats, *args: float) -> Floats:
        """Return the line without background, from x and the reported parameters in their order."""

    def curve(self, x: Floats, values: dict[str, float]) -> Floats:
        """Return the line without background for values by name, derived ones among them where known."""
        return self.function(x, *(values[parameter.name] for parameter in self.parameters))

    @abstractmethod
    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return the linear columns and their derivatives.

        Parameters
        ----------
        u : (M or 1, n) float array
            x in the frame.
        theta : (M, P) float array

        Returns
        -------
        columns : (M, L, n) float array
        derivatives : (M, P, L, n) float array
        """

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the linear columns alone, (M, L, n)."""
        return self.basis(u, theta)[0]

    def gradient(self, u: Floats, theta: Floats, c: Floats) -> Floats:
        """Return the derivatives of a numeric shape at one theta (P,) and coefficients c, (P, n) at u (n,)."""
        raise NotImplementedError

    def templates(self, u: Floats, theta: Floats) -> Floats:
        """Return the columns as the start grid sees them: a near stand-in where they are costly."""
        return self.columns(u, theta)

    @abstractmethod
    def grid(self, window: Window) -> Floats:
        """Return the start grid, (G, P), every place a minimum could hide from its neighbours."""

    def more_starts(self, window: Window) -> Floats:
        """Return further places, (K, P), to look at where there is no grid but a given start."""
        del window
        return np.zeros((0, len(self.theta)))

    @abstractmethod
    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return the lowest and highest theta that are searched, (P,) each."""

    @abstractmethod
    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two points of the grid lead to the same minimum; (…, P) arrays broadcast."""

    def form(self, fixed: frozenset[str]) -> LineShape:
        """Return the form of this shape in which every fixed parameter is a coordinate of its own."""
        del fixed
        return self

    @property
    def positive(self) -> frozenset[str]:
        """Names of the parameters that must be greater than zero."""
        return frozenset(theta.name for theta in self.theta if theta.positive)

    def place(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return theta, (B, P), where reported values tell it, nan elsewhere; one row a data set of the frame."""
        theta = np.full((len(frame.xs), len(self.theta)), np.nan)
        for j, coordinate in enumerate(self.theta):
            if coordinate.name in values:
                theta[:, j] = coordinate.from_value(values[coordinate.name], frame)
        return theta

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return the coordinates q of the reported parameters and their derivatives.

        Parameters
        ----------
        theta : (M, P) float array
        c : (M, L) float array
            Coefficients of the columns.
        frame : Frame
            Of the same M data sets.

        Returns
        -------
        q : (M, R) float array
            In the order of ``parameters``; see `Theta` for what q is.
        dq : (M, R, P + L) float array
            Derivatives for theta, then c.
        """
        names = [parameter.name for parameter in self.parameters]
        size = len(self.theta)
        q = np.zeros((len(theta), len(names)))
        dq = np.zeros((len(theta), len(names), size + c.shape[1]))
        for j, coordinate in enumerate(self.theta):
            row = names.index(coordinate.name)
            offset, slope = coordinate.line(frame)
            q[:, row] = offset + slope * theta[:, j]
            dq[:, row, j] = slope
        for j, name in enumerate(self.linear):
            if name in names:
                row = names.index(name)
                q[:, row] = frame.ys * c[:, j]
                dq[:, row, size + j] = frame.ys
        return q, dq

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return the coordinates of the derived numbers and their derivatives.

        Parameters
        ----------
        q : (M, R) float array
            Coordinates of the reported parameters, as `report` returns them.

        Returns
        -------
        values : (M, D) float array
            In the order of ``derived``.
        dq : (M, D, R) float array
        """
        return np.zeros((len(q), 0)), np.zeros((len(q), 0, q.shape[1]))

    def links(self) -> tuple[Link, ...]:
        """Return how each reported parameter follows from its q."""
        by_name = {coordinate.name: coordinate.link for coordinate in self.theta}
        return tuple(by_name.get(parameter.name, "linear") for parameter in self.parameters)


def rate_grid(window: Window, count: int = 24) -> Floats:
    """Return a start grid over ln rate, from a twentieth of the window to the finest spacing."""
    high = 3.0 / window.finest
    return np.linspace(np.log(0.05 / window.span), np.log(high), count)[:, None]


def rate_bounds(window: Window) -> tuple[Floats, Floats]:
    """Return bounds of ln rate; with a background a slow decay is a straight line and cannot be told."""
    slowest = 1e-5 if window.background == "none" else 1e-3
    return np.array([np.log(slowest / window.span)]), np.array([np.log(10.0 / window.finest)])


def loss_bounds(window: Window, factor: float) -> tuple[Floats, Floats]:
    """Return bounds of ln rate for a shape with a pole at ``x = -1 / (factor rate)``, kept off the points."""
    low, high = rate_bounds(window)
    if window.low < 0:
        high = np.minimum(high, np.log(0.99 / (factor * -window.low)))
    return np.minimum(low, high - 1.0), high


def rate_near(one: Floats, other: Floats) -> Bools:
    """Return whether two ln rates lead to the same minimum."""
    return np.asarray(np.abs(one[..., 0] - other[..., 0]) <= 1.5)
