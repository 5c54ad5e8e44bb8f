"""Data sets as the solver wants them: in their frame, whitened, padded to one length."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints
from nightfold.fits.engine.frame import Frame


@dataclass(frozen=True)
class DataSets:
    """B data sets in their frames; an array with one row serves all of them.

    Attributes
    ----------
    u : (B or 1, n) float array
    root_weights : (B or 1, n) float array or None
        Square roots of the weights, zero for padding; None when all weights are one.
    z : (B, n) float array
        y in its frame times the root weights.
    coefficients : (B, L) float array
        Fixed coefficients, zero where free.
    shift : (B or 1, 1) float array
    low, high : (B or 1, P) float arrays
        Bounds of theta.
    frame : Frame
    count : (B,) int array
        Number of points that count.
    """

    u: Floats
    root_weights: Floats | None
    z: Floats
    coefficients: Floats
    shift: Floats
    low: Floats
    high: Floats
    frame: Frame
    count: Ints

    def take(self, rows: Ints) -> DataSets:
        """Return the data sets of those rows, in that order."""
        return DataSets(
            _take(self.u, rows),
            None if self.root_weights is None else _take(self.root_weights, rows),
            self.z[rows],
            self.coefficients[rows],
            _take(self.shift, rows),
            _take(self.low, rows),
            _take(self.high, rows),
            self.frame.take(rows),
            self.count[rows],
        )


def _take(array: Floats, rows: Ints) -> Floats:
    return array if len(array) == 1 else array[rows]


def stack(parts: list[DataSets]) -> DataSets:
    """Return one batch of several, padded with points of no weight."""
    if len(parts) == 1:
        return parts[0]
    size = max(part.u.shape[1] for part in parts)
    whole = [_padded(part, size) for part in parts]
    frames = [part.frame for part in whole]
    frame = Frame(*(np.concatenate([getattr(f, name) for f in frames]) for name in ("x0", "xs", "y0", "ys")))
    arrays = {
        name: np.concatenate([getattr(part, name) for part in whole])
        for name in ("u", "root_weights", "z", "coefficients", "shift", "low", "high", "count")
    }
    return DataSets(frame=frame, **arrays)


def _padded(part: DataSets, size: int) -> DataSets:
    rows, extra = len(part.z), size - part.u.shape[1]
    roots = np.ones((1, part.u.shape[1])) if part.root_weights is None else part.root_weights

    def pad(array: Floats, mode: str) -> Floats:
        full = np.broadcast_to(array, (rows, array.shape[1]))
        if mode == "edge":
            return np.pad(full, ((0, 0), (0, extra)), mode="edge")
        return np.pad(full, ((0, 0), (0, extra)))

    def spread(array: Floats) -> Floats:
        return np.broadcast_to(array, (rows, array.shape[1]))

    return DataSets(
        pad(part.u, "edge"),
        pad(roots, "constant"),
        pad(part.z, "constant"),
        part.coefficients,
        spread(part.shift),
        spread(part.low),
        spread(part.high),
        part.frame,
        part.count,
    )
