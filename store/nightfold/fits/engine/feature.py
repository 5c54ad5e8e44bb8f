"""Is there anything to fit? A permutation test of the start grid's best gain.

Shuffling the shots destroys any line; the share of shuffles in which some line of the grid explains as much
as the best one does for the data is the p value. It takes the whole search into account, which an F test of
the fitted line does not (Freedman and Lane, J. Bus. Econ. Stat. 1, 292 (1983), for residuals).
"""

from __future__ import annotations

from hashlib import blake2b

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.grid import Grid
from nightfold.fits.engine.reduction import Reduction

SHUFFLES = 300
LEVEL = 0.005
"""None of the shuffles may look as much like a line as the data."""


def permutation_p(grid: Grid, reduction: Reduction, u: Floats, roots: Floats, Z: Floats, null: str) -> Floats:
    """Return the p value of "nothing but background" for each data set.

    Parameters
    ----------
    grid : Grid
        Templates against a "flat" or "sloped" background.
    reduction : Reduction
        Of the same points.
    u, roots : (n,) float arrays
        Points and root weights.
    Z : (B, n) float array
        Whitened data.
    null : {"flat", "sloped"}

    Notes
    -----
    Shuffles follow a generator seeded by the order of the data's values, so that the same data give the same
    number in any unit and in any order of taking.
    """
    rows = np.vstack([roots, roots * u][: 1 + (null == "sloped")])
    q, _ = np.linalg.qr(rows.T)
    left = Z - (Z @ q) @ q.T
    observed = grid.best_gains(reduction.whiten(left))
    p = np.ones(len(Z))
    for row, residual in enumerate(left):
        generator = np.random.Generator(np.random.PCG64(seed_of(residual)))
        shuffled = generator.permuted(np.broadcast_to(residual, (SHUFFLES, len(residual))), axis=1)
        gains = grid.best_gains(reduction.whiten(shuffled))
        reached = np.count_nonzero(gains >= observed[row] * (1 - 1e-6))
        p[row] = (1 + reached) / (1 + SHUFFLES)
    return p


def constant_p(z: Floats, root_weights: Floats, sse: Floats, free: int) -> Floats:
    """Return the p value of an F test of each fit against a constant, one a data set.

    For models without a start grid, which can be asked no more than whether they follow the data at all.
    """
    from scipy.special import fdtrc

    level = root_weights / np.linalg.norm(root_weights)
    constant = np.einsum("bn,bn->b", z, z) - (z @ level) ** 2
    spare = z.shape[1] - free
    if free < 2 or spare < 1:
        return np.zeros(len(z))
    gain = np.maximum(constant - sse, 0.0) / (free - 1)
    return np.asarray(fdtrc(free - 1, spare, gain / np.maximum(sse / spare, 1e-300)))


def seed_of(values: Floats) -> int:
    """Return a seed that depends on the order of the values alone."""
    ranks = np.argsort(values, kind="stable").astype("<i8")
    return int.from_bytes(blake2b(ranks.tobytes(), digest_size=8).digest(), "little")
