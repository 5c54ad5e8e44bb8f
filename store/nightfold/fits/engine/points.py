"""Data sets with their weights taken off, for a recipe that weighs them in several ways."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.data import DataSets


@dataclass(frozen=True)
class Points:
    """B data sets, n points each (padded).

    Attributes
    ----------
    data : DataSets
        Where the points are; its own weights do not matter.
    v : (B, n) float array
        y in the frame.
    used : (B, n) bool array
        Which points count.
    stated : (B, n) float array or None
        Stated variances of the points, in the frame.
    """

    data: DataSets
    v: Floats
    used: Bools
    stated: Floats | None

    def take(self, rows: Ints) -> Points:
        """Return the data sets of those rows, in that order."""
        stated = None if self.stated is None else self.stated[rows]
        return Points(self.data.take(rows), self.v[rows], self.used[rows], stated)

    def without(self, out: Bools) -> Points:
        """Return the data sets without some points, (B, n) bool."""
        return replace(self, used=self.used & ~out)

    def weighted(self, weights: Floats) -> DataSets:
        """Return the data sets with weights (B, n), which are zero for points that do not count.

        Their ``count`` is that of the points handed in.
        """
        roots = np.sqrt(weights)
        data = self.data
        return DataSets(
            data.u,
            roots,
            self.v * roots,
            data.coefficients,
            data.shift,
            data.low,
            data.high,
            data.frame,
            data.count,
        )

    @property
    def origin(self) -> Floats:
        """Where y is zero, in the frame, (B, 1)."""
        return np.asarray((self.data.frame.y0 / self.data.frame.ys)[:, None])
