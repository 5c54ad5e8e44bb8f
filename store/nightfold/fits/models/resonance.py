"""What all resonances share: center and width, their start grid, and the quality factor."""

from __future__ import annotations

from abc import abstractmethod

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Origin
from nightfold.fits.models.shape import (
    Background,
    Derived,
    Kind,
    LineShape,
    Parameter,
    Theta,
    Window,
    position,
    width,
)

PEAK = (
    Parameter("center", "position of the line", "x"),
    Parameter("fwhm", "full width at half maximum", "x"),
    Parameter("amplitude", "height above the background; negative for a dip", "y"),
)
CENTER, FWHM = position("center"), width("fwhm")
QUALITY = Derived("quality_factor", "|center| / fwhm; means something where x counts from zero", "", "log")


class Resonance(LineShape):
    """A line of one height, ``amplitude S((x - center) / fwhm)``, with S(0) = 1.

    Further coordinates of S, if any, come after the center and ln fwhm.
    """

    kind: Kind = "resonance"
    default_background: Background = "flat"
    parameters: tuple[Parameter, ...] = PEAK
    theta: tuple[Theta, ...] = (CENTER, FWHM)
    linear: tuple[str | None, ...] = ("amplitude",)
    origin: Origin = "middle"
    derived: tuple[Derived, ...] = (QUALITY,)

    @abstractmethod
    def profile(self, d: Floats, more: Floats) -> tuple[Floats, ...]:
        """Return S, its derivative for d, and those for the further coordinates, (M, n) each.

        Parameters
        ----------
        d : (M, n) float array
            Distance from the center, in units of the fwhm.
        more : (M, P - 2) float array
            Further coordinates.
        """

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return ``S(d)``, d = (u - c) / w, with derivatives ``-S' / w``, (ln w) ``-d S'`` and the further ones."""
        scale = np.exp(-theta[:, 1:2])
        d = (u - theta[:, :1]) * scale
        line, slope, *others = self.profile(d, theta[:, 2:])
        derivatives = np.empty((len(theta), theta.shape[1], 1, u.shape[1]))
        np.multiply(slope, -scale, out=derivatives[:, 0, 0])
        np.multiply(slope, -d, out=derivatives[:, 1, 0])
        for j, other in enumerate(others):
            derivatives[:, 2 + j, 0] = other
        return line[:, None], derivatives

    def further(self) -> Floats:
        """Return the further coordinates that the grid tries, (K, P - 2)."""
        return np.zeros((1, 0))

    def narrowest(self, window: Window) -> float:
        """Return the narrowest width of the grid: one spacing; a narrower line has no two points on it."""
        return min(window.spacing, max(window.finest, window.span / 1500))

    def grid(self, window: Window) -> Floats:
        """Return centers and widths: nine widths, centers a third of the width apart."""
        widths = np.geomspace(self.narrowest(window), 1.2 * window.span, 9)
        parts = []
        for w in widths:
            margin = min(w / 2, window.span / 4)
            count = min(int(np.ceil((window.span + 2 * margin) / (w / 3))) + 1, 3000)
            centers = np.linspace(window.low - margin, window.high + margin, count)
            parts.append(np.column_stack([centers, np.full(count, np.log(w))]))
        plain, further = np.vstack(parts), self.further()
        return np.column_stack([np.repeat(plain, len(further), axis=0), np.tile(further, (len(plain), 1))])

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return bounds: one window to either side, a quarter of the finest spacing to 20 windows wide."""
        low = np.array([window.low - window.span, np.log(window.finest / 4)])
        high = np.array([window.high + window.span, np.log(20 * window.span)])
        return low, high

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return whether two starts lead to the same minimum: half a width apart, a factor e wide."""
        reach = 0.5 * np.exp(np.maximum(one[..., 1], other[..., 1]))
        return np.asarray(
            (np.abs(one[..., 0] - other[..., 0]) <= reach) & (np.abs(one[..., 1] - other[..., 1]) <= 1.0)
        )

    def derive(self, q: Floats) -> tuple[Floats, Floats]:
        """Return ln |center| - ln fwhm and its derivatives."""
        dq = np.zeros((len(q), 1, q.shape[1]))
        with np.errstate(divide="ignore"):
            value = np.log(np.abs(q[:, :1])) - q[:, 1:2]
            dq[:, 0, 0], dq[:, 0, 1] = 1.0 / q[:, 0], -1.0
        return value, dq
