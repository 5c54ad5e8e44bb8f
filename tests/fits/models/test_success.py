"""The global start finds the minimum: never a worse one than a descent from the truth does."""

from __future__ import annotations

import numpy as np
import pytest

from nightfold.fits.many import fit_many
from nightfold.fits.models import MODEL_NAMES

from .scans import make_scans

GRIDS = 10


@pytest.mark.parametrize("model", MODEL_NAMES)
def test_the_start_finds_the_minimum(model: str) -> None:
    print(f"{model}: {100 * success(model, range(GRIDS)):.1f} %")
    assert success(model, range(GRIDS)) >= 0.995


def success(model: str, seeds: range) -> float:
    """Return the share of scans fitted as well from nowhere as from the truth."""
    good = []
    for seed in seeds:
        scans = make_scans(model, seed)
        options = {"background": scans.background, "weights": "equal", "robust": False}
        found = fit_many(scans.x, scans.Y, model, **options)  # type: ignore[arg-type]
        start = {n: v for n, v in scans.truth.items() if np.isfinite(v) or n == "decay_time"}
        told = fit_many(scans.x, scans.Y, model, start=start, **options)  # type: ignore[arg-type]
        best = np.fmin(told.residual_stderr, np.inf)
        good.append(found.converged & (found.residual_stderr <= best * (1 + 1e-7)))
    return float(np.mean(good))
