"""Mixtures of Student t: what is known of a parameter when the variance law is not.

Under each law the coordinate q of a parameter is distributed about its estimate as Student's t; the laws
count by how well they explain the scatter. The interval is that of the mixture.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints

STEPS = 60
TOLERANCE = 1e-9


@dataclass(frozen=True, eq=False)
class Mixture:
    """Mixtures of K t distributions, for B quantities.

    Attributes
    ----------
    q, spread, weight : (B, K) float arrays
        Centers, scales and weights.
    dof : (B,) float array
        Degrees of freedom, infinite for normal distributions.
    """

    q: Floats
    spread: Floats
    weight: Floats
    dof: Floats

    def take(self, rows: Ints | slice) -> Mixture:
        """Return some of the quantities."""
        return Mixture(self.q[rows], self.spread[rows], self.weight[rows], self.dof[rows])

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Mixture) and all(
            np.array_equal(getattr(self, name), getattr(other, name), equal_nan=True)
            for name in ("q", "spread", "weight", "dof")
        )

    __hash__ = None  # type: ignore[assignment]

    def below(self, q: Floats) -> Floats:
        """Return the probability of values below q, (B,)."""
        from scipy.special import ndtr, stdtr

        with np.errstate(invalid="ignore", divide="ignore"):
            z = (q[:, None] - self.q) / self.spread
        z = np.where(np.isnan(z), 0.0, z)
        finite = np.isfinite(self.dof)
        dof = np.where(finite & (self.dof > 0), self.dof, 1.0)[:, None]
        part = np.where(finite[:, None], stdtr(dof, z), ndtr(z))
        return np.asarray((self.weight * part).sum(axis=1))

    def quantile(self, probability: float) -> Floats:
        """Return quantiles, (B,), nan where any part is not known and infinite without degrees of freedom.

        Between the least and the largest quantile of the parts, by the Illinois rule of false position, which
        never leaves the bracket.
        """
        reach = t_quantile(probability, self.dof)
        some = self.weight > 0
        with np.errstate(invalid="ignore"):
            parts = self.q + np.where(self.spread == 0, 0.0, reach[:, None] * self.spread)
        low = np.where(some, parts, np.inf).min(axis=1)
        high = np.where(some, parts, -np.inf).max(axis=1)
        out = np.where(low == high, low, np.nan)
        open_ = np.flatnonzero((low < high) & np.isfinite(low) & np.isfinite(high))
        if len(open_):
            out[open_] = self.take(open_)._search(probability, low[open_], high[open_])
        unknown = ~np.isfinite(reach) | (some & np.isinf(self.spread)).any(axis=1)
        return np.where(unknown & ~np.isnan(parts).all(axis=1), np.copysign(np.inf, probability - 0.5), out)

    def _search(self, probability: float, low: Floats, high: Floats) -> Floats:
        span = high - low
        below, above = self.below(low) - probability, self.below(high) - probability
        middle = low
        for _ in range(STEPS):
            slope = above - below
            middle = np.where(slope > 0, low - below * (high - low) / np.where(slope > 0, slope, 1.0), low)
            middle = np.minimum(np.maximum(middle, low), high)
            found = self.below(middle) - probability
            if (np.abs(found) <= TOLERANCE).all() or (high - low <= 1e-12 * span).all():
                break
            left = found < 0
            above = np.where(left, above / 2, found)
            below = np.where(left, found, below / 2)
            low, high = np.where(left, middle, low), np.where(left, high, middle)
        return np.asarray(middle)


@dataclass(frozen=True)
class Averaged:
    """Fits of B data sets under K laws: ``q``, ``spread`` (B, K, R), ``weight`` (B, K)."""

    q: Floats
    spread: Floats
    weight: Floats

    @classmethod
    def blank(cls, count: int, laws: int, names: int) -> Averaged:
        """Return arrays to be filled."""
        shape = (count, laws, names)
        return cls(np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape[:2], np.nan))

    def column(self, row: int, dof: Floats) -> Mixture:
        """Return the mixtures of one parameter."""
        return Mixture(self.q[:, :, row], self.spread[:, :, row], self.weight, dof)


def t_quantile(probability: float, dof: Floats) -> Floats:
    """Return quantiles of Student's t, infinite without degrees of freedom."""
    from scipy.special import ndtri, stdtrit

    finite = np.where(np.isfinite(dof) & (dof > 0), dof, 1.0)
    quantile = np.where(np.isfinite(dof), stdtrit(finite, probability), ndtri(probability))
    infinite = np.copysign(np.inf, probability - 0.5)
    return np.asarray(np.where(dof > 0, quantile, infinite), dtype=np.float64)
