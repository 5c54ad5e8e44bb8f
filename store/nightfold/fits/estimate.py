"""Estimates: a value, its standard uncertainty, its unit, and its interval at any level."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from nightfold.errors import FitError
from nightfold.fits.engine.links import steepness
from nightfold.fits.engine.mixture import Mixture
from nightfold.fits.engine.uncertainty import interval, mixed_interval

if TYPE_CHECKING:
    from nightfold.fits.engine.arrays import Floats
    from nightfold.fits.models.shape import Link


@dataclass(frozen=True)
class Estimate:
    """One number of a fit.

    Attributes
    ----------
    value : float
    stderr : float
        Standard uncertainty of the value; 0 for a fixed parameter, infinite where the data tell nothing.
    unit : str
    link : Link
        The coordinate in which intervals are symmetric, or averaged: the value, its logarithm, its reciprocal, ….
    spread : float
        Standard uncertainty in that coordinate; taken from stderr when left out.
    dof : float
        Degrees of freedom of the interval's Student t; infinite for a normal one.
    mixture : Mixture, optional
        What is known of the coordinate where several variance laws were averaged; the interval is then the mixture's.

    Examples
    --------
    >>> Estimate(33.612, 0.014, "G").interval(0.95)
    (33.58456..., 33.63943...)
    """

    value: float
    stderr: float
    unit: str = ""
    link: Link = field(default="linear", repr=False)
    spread: float | None = field(default=None, repr=False)
    dof: float = field(default=float("inf"), repr=False)
    mixture: Mixture | None = field(default=None, repr=False)

    def interval(self, level: float) -> tuple[float, float]:
        """Return the limits of the central interval with that probability inside.

        Raises
        ------
        FitError
            When the level is not between 0 and 1.
        """
        check_level(level)
        if self.mixture is not None:
            ends = mixed_interval(np.array([self.value]), self.mixture, self.link, level)
            return float(ends[0][0]), float(ends[1][0])
        spread = self._own_spread() if self.spread is None else self.spread
        low, high = interval(np.array(self.value), np.array(spread), np.array(self.dof), self.link, level)
        return float(low), float(high)

    def _own_spread(self) -> float:
        slope = abs(float(steepness(np.array(self.value), self.link)))
        return self.stderr / slope if slope else self.stderr


@dataclass(frozen=True)
class EstimateColumn:
    """One number of many fits: arrays where `Estimate` has numbers, (B,) each."""

    value: Floats
    stderr: Floats
    unit: str
    link: Link = field(repr=False)
    spread: Floats = field(repr=False)
    dof: Floats = field(repr=False)
    mixture: Mixture | None = field(default=None, repr=False)

    def interval(self, level: float) -> tuple[Floats, Floats]:
        """Return the limits of the central intervals with that probability inside, (B,) each.

        Raises
        ------
        FitError
            When the level is not between 0 and 1.
        """
        check_level(level)
        if self.mixture is not None:
            return mixed_interval(self.value, self.mixture, self.link, level)
        return interval(self.value, self.spread, self.dof, self.link, level)

    def __getitem__(self, row: int) -> Estimate:
        """Return the estimate of one data set."""
        return Estimate(
            float(self.value[row]),
            float(self.stderr[row]),
            self.unit,
            self.link,
            float(self.spread[row]),
            float(self.dof[row]),
            None if self.mixture is None else self.mixture.take(slice(row, row + 1)),
        )


def check_level(level: float) -> float:
    """Return the level of an interval.

    Raises
    ------
    FitError
        When it is not between 0 and 1.
    """
    if not 0 < level < 1:
        raise FitError(f"interval: found level {level:g}, wanted one between 0 and 1 (0.95 for 95 %)")
    return float(level)


def compose_unit(pattern: str, unit_x: str, unit_y: str) -> str:
    """Return the unit of a parameter from the units of x and y.

    Parameters
    ----------
    pattern : str
        ``x``, ``y``, ``1/x``, ``y/x``, ``(y/x)^2`` or a unit of its own (``rad``, empty for none).

    Examples
    --------
    >>> compose_unit("y/x", "G", "atoms"), compose_unit("1/x", "kHz/s", ""), compose_unit("1/x", "", "")
    ('atoms/G', '1/(kHz/s)', '')
    """
    if pattern in ("x", "y"):
        return unit_x if pattern == "x" else unit_y
    if pattern == "(y/x)^2":
        velocity = compose_unit("y/x", unit_x, unit_y)
        return f"({velocity})^2" if velocity else ""
    if pattern not in ("1/x", "y/x"):
        return pattern
    top = unit_y if pattern == "y/x" else ""
    if not unit_x:
        return top
    bottom = f"({unit_x})" if any(sign in unit_x for sign in "*/ ") else unit_x
    return f"{top or 1}/{bottom}"
