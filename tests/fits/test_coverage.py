"""Intervals contain the truth as often as they say, for scatter that is normal and the same everywhere."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom

from nightfold.fits.many import fit_many

from .examples import EXAMPLES, Example

SETS = 600


@pytest.mark.parametrize("level", [0.6827, 0.95])
@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_intervals_cover(example: Example, level: float) -> None:
    table = fit_many(
        example.x, example.noisy(99, 0.05, (SETS,)), example.model, background=example.background
    )
    least, most = (binom.ppf(tail, SETS, level) for tail in (2e-4, 1 - 2e-4))
    for name, truth in example.truth.items():
        low, high = table.estimates[name].interval(level)
        middle = table.estimates[name].value
        if name == "phase":
            turn = 2 * np.pi * np.round((middle - truth) / (2 * np.pi))
            low, high = low - turn, high - turn
        hits = int(np.count_nonzero((low <= truth) & (truth <= high)))
        assert least <= hits <= most, (name, hits / SETS)


@pytest.mark.parametrize("n", [10, 16])
def test_absolute_and_scaled_intervals_cover_for_few_points(n: int) -> None:
    x = np.linspace(0.0, 3.0, n)
    stderr = np.linspace(0.02, 0.06, n)
    Y = np.exp(-x) + stderr * np.random.default_rng(4).normal(size=(SETS, n))
    for absolute in (False, True):
        table = fit_many(x, Y, "exponential", stderr=stderr, weights="given", absolute_stderr=absolute)
        low, high = table.estimates["lifetime"].interval(0.95)
        hits = int(np.count_nonzero((low <= 1.0) & (high >= 1.0)))
        assert binom.ppf(2e-4, SETS, 0.95) <= hits <= binom.ppf(1 - 2e-4, SETS, 0.95)
