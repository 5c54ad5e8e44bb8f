"""Points as the start grid sees them: repeats and, in long scans, neighbours brought together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints

MOST_BINS = 512
"""Scans with more distinct x than this are averaged in bins for the grid (never for the fit itself)."""


@dataclass(frozen=True)
class Reduction:
    """Bins of sorted points.

    Attributes
    ----------
    u : (d,) float array
        Weighted mean of u in each bin.
    roots : (d,) float array
        Square roots of the summed weights.
    starts : (d,) int array
        First point of each bin.
    point_roots : (n,) float array
        Square roots of the points' weights.
    """

    u: Floats
    roots: Floats
    starts: Ints
    point_roots: Floats

    def whiten(self, z: Floats) -> Floats:
        """Return whitened bin means, (…, d), of whitened points, (…, n)."""
        if len(self.starts) == z.shape[-1]:
            return z
        return np.asarray(np.add.reduceat(z * self.point_roots, self.starts, axis=-1) / self.roots)


def reduce_points(u: Floats, roots: Floats) -> Reduction:
    """Return the bins of points sorted by u, repeats together; inner products of columns keep their value."""
    starts = np.flatnonzero(np.concatenate([[True], np.diff(u) > 0]))
    if len(starts) > MOST_BINS:
        edges = np.linspace(0, len(starts), MOST_BINS + 1).astype(np.intp)
        starts = starts[edges[:-1]]
    weights = np.add.reduceat(roots**2, starts)
    means = np.add.reduceat(roots**2 * u, starts) / weights
    return Reduction(means, np.sqrt(weights), starts, roots)
