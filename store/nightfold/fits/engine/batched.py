"""Small products of many small matrices, each written the way that is quick for its batch size."""

from __future__ import annotations

import numpy as np

from nightfold.fits.engine.arrays import Floats

LARGE = 16
"""From this many matrices on, one pass an entry beats one matrix product a matrix."""


def gram(one: Floats, other: Floats) -> Floats:
    """Return ``one @ other^T`` of (M, K, n) and (M, L, n): (M, K, L)."""
    if len(one) < LARGE:
        return np.asarray(one @ other.transpose(0, 2, 1))
    out = np.empty((len(one), one.shape[1], other.shape[1]))
    for k in range(one.shape[1]):
        for j in range(other.shape[1]):
            if one is other and j < k:
                out[:, k, j] = out[:, j, k]
            else:
                out[:, k, j] = np.einsum("mn,mn->m", one[:, k], other[:, j])
    return out


def dot(rows: Floats, vector: Floats) -> Floats:
    """Return ``rows @ vector`` of (M, K, n) and (M, n): (M, K)."""
    if len(rows) < LARGE:
        return np.asarray((rows @ vector[:, :, None])[:, :, 0])
    return np.asarray(np.einsum("mkn,mn->mk", rows, vector))


def combine(c: Floats, rows: Floats) -> Floats:
    """Return the sums of rows (M, K, n) with weights c, (M, K) or (M, P, K): (M, n) or (M, P, n)."""
    if c.ndim == 3:
        return np.asarray(c @ rows)
    if len(rows) < LARGE:
        return np.asarray((c[:, None] @ rows)[:, 0])
    return np.asarray(np.einsum("mk,mkn->mn", c, rows))


def diagonal(matrix: Floats) -> Floats:
    """Return the diagonals of (M, k, k), (M, k)."""
    return np.asarray(matrix.diagonal(0, 1, 2))


def inverse(matrix: Floats) -> Floats:
    """Return the inverses of positive semidefinite matrices, (M, k, k), kept from being singular."""
    size = matrix.shape[1]
    lift = diagonal(matrix) * (1.0 + 1e-14) + 1e-200
    if size == 1:
        return np.asarray(1.0 / lift[:, :, None])
    if size == 2:
        return _inverse_of_two(lift[:, 0], matrix[:, 0, 1], lift[:, 1])
    lifted = matrix.copy()
    for k in range(size):
        lifted[:, k, k] = lift[:, k]
    try:
        return np.asarray(np.linalg.inv(lifted))
    except np.linalg.LinAlgError:
        return np.stack([_one_inverse(one) for one in lifted])


def _inverse_of_two(a: Floats, b: Floats, d: Floats) -> Floats:
    out = np.empty((len(a), 2, 2))
    share = b / a
    pivot = np.maximum(d - b * share, 1e-14 * d)
    out[:, 1, 1] = bottom = 1.0 / pivot
    out[:, 0, 1] = out[:, 1, 0] = cross = -share * bottom
    out[:, 0, 0] = 1.0 / a - share * cross
    return out


def _one_inverse(matrix: Floats) -> Floats:
    try:
        return np.asarray(np.linalg.inv(matrix))
    except np.linalg.LinAlgError:
        return np.full_like(matrix, np.nan)
