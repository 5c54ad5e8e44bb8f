"""The frame a fit is done in: where x and y are shifted and scaled to numbers of order one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints

Origin = Literal["middle", "first", "zero", "none"]


@dataclass(frozen=True)
class Frame:
    """Shift and scale of x and y, one row a data set: ``u = (x - x0) / xs``, ``v = (y - y0) / ys``.

    Attributes
    ----------
    x0, xs : (B,) float arrays, unit of x
    y0, ys : (B,) float arrays, unit of y
    """

    x0: Floats
    xs: Floats
    y0: Floats
    ys: Floats

    def take(self, rows: Ints | Bools) -> Frame:
        """Return the frames of some data sets."""
        return Frame(self.x0[rows], self.xs[rows], self.y0[rows], self.ys[rows])


def make_frame(x: Floats, Y: Floats, origin: Origin, y0: Floats | None) -> Frame:
    """Return the frames of data sets that share x.

    Parameters
    ----------
    x : (n,) float array
        Where the points are, sorted.
    Y : (B, n) float array
        One data set a row.
    origin : {"middle", "first", "zero", "none"}
        Where u is zero: in the middle of x, at its first point, at x = 0; "none" leaves x and y as they are.
    y0 : (B,) float array or None
        What y counts from; None for the mean of y, which is right when the model has a free offset.

    Notes
    -----
    The offset of x goes before anything else is computed: at 384 THz a relative step of 1e-8 is as wide as
    a 6 MHz line.
    """
    count = len(Y)
    if origin == "none":
        return Frame(np.zeros(count), np.ones(count), np.zeros(count), np.ones(count))
    x0 = {"middle": x[0] + (x[-1] - x[0]) / 2, "first": x[0], "zero": 0.0}[origin]
    xs = x[-1] - x[0] if origin != "zero" else np.max(np.abs(x))
    base = Y.mean(axis=1) if y0 is None else y0
    ys = np.max(np.abs(Y - base[:, None]), axis=1)
    ys = np.where(ys > 0, ys, 1.0)
    return Frame(np.full(count, x0), np.full(count, xs), base, ys)
