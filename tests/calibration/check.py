"""Check the generator by itself: ``python tests/calibration/check.py [SEED]``.

The curve at the reported truth must leave residuals of variance one; SciPy's least squares, started at the truth with
the true weights, must cover the truth in 68 and 95 % of all scans. All deviations are shrunk to 2 %, so that the
problem is linear and nothing but the truths is tested. The library is not used.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from scipy.optimize import least_squares
from scipy.stats import norm

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
from tests.calibration.scans import Batch, make_batches
from tests.calibration.shapes import SPECS, Array, total

LEVELS = (0.6827, 0.95)
SHRINK = 0.02


def _moved(link: str, truth: float, by: float) -> Array:
    if link == "log":
        return np.array([truth * np.exp(np.clip(by, -30, 30))])
    return np.array([1 / (1 / truth + by) if link == "reciprocal" else truth + by])


def pulls(batch: Batch, row: int) -> Array:
    """Return (estimate - truth) / stderr of every name, in its coordinate, from SciPy's least squares."""
    spec, names = SPECS[batch.model], list(batch.truth)
    truth = np.array([batch.truth[name][row] for name in names])
    least = SHRINK * np.array([batch.least[name][row] for name in names])
    shape = total(spec, batch.background, batch.x, batch.truth)[row]
    Y, sigma = shape + SHRINK * (batch.Y[row] - shape), SHRINK * batch.sigma[row]
    links = [batch.links[name] for name in names]

    def values(step: Array) -> dict[str, Array]:
        moved = zip(names, links, truth, step * least, strict=True)
        return {name: _moved(link, middle, by) for name, link, middle, by in moved}

    def residuals(step: Array) -> Array:
        return np.asarray((total(spec, batch.background, batch.x, values(step))[0] - Y) / sigma)

    def slopes(step: Array) -> Array:
        small = 1e-3 * np.eye(len(names))
        return np.stack([(residuals(step + e) - residuals(step - e)) / 2e-3 for e in small], axis=1)

    found = least_squares(residuals, np.zeros(len(names)), slopes)
    slope = slopes(found.x)
    return np.asarray(found.x / np.sqrt(np.diag(np.linalg.inv(slope.T @ slope))))


def main(seed: int) -> None:
    print(f"{'model':<22}{'chi2/n':>8}  68.27 / 95 %: normal intervals with true weights, {seed=}")
    for model, spec in SPECS.items():
        chi, z = [], []
        for n in (30, 60):
            for batch in make_batches(model, n, "clean", 100, seed):
                y = total(spec, batch.background, batch.x, batch.truth)
                chi.append(np.mean(((batch.Y - y) / batch.sigma) ** 2))
                z += [pulls(batch, row) for row in range(len(batch))]
        away = np.abs(np.concatenate(z))
        inside = [np.mean(away < norm.ppf(0.5 + level / 2)) for level in LEVELS]
        print(f"{model:<22}{np.mean(chi):8.3f}  {100 * inside[0]:.1f} / {100 * inside[1]:.1f}", flush=True)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 0)
