from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import product
from typing import Any

import numpy as np
import pytest

from nightfold import FitResult, FitTable, fit_curve, fit_many

Table = Callable[..., FitTable]


def dip(x: np.ndarray[Any, Any], center: float) -> np.ndarray[Any, Any]:
    return np.asarray(1.2e5 - 6e4 / (1 + (2 * (x - center) / 0.6) ** 2))


@pytest.fixture(scope="session")
def resonance() -> FitResult:
    """Return a fit of a dip with three shots a point."""
    x = np.repeat(np.linspace(60.0, 62.5, 21), 3)
    y = dip(x, 61.36) * (1 + 0.02 * np.random.default_rng(1).normal(size=len(x)))
    return fit_curve(x, y, "lorentzian", unit_x="A", unit_y="atoms", weights="equal", robust=False)


@pytest.fixture(scope="session")
def nothing() -> FitResult:
    """Return a fit of scatter, which is not to be trusted."""
    x = np.linspace(60.0, 62.5, 24)
    y = 1e5 + np.random.default_rng(3).normal(0, 2e3, 24)
    return fit_curve(x, y, "lorentzian", unit_x="A", unit_y="atoms")


@pytest.fixture(scope="session")
def slices() -> Table:
    """Return a function that makes fits of slices over some axes; those of some rows see nothing."""

    def make(axes: dict[str, tuple[Any, ...]], bad: tuple[int, ...] = ()) -> FitTable:
        rng, x = np.random.default_rng(2), np.linspace(60.0, 62.5, 17)
        places = [dict(zip(axes, values, strict=True)) for values in product(*axes.values())]
        Y = np.array([dip(x, 61.0 + 0.03 * row / len(places)) for row in range(len(places))])
        Y[list(bad)] = 1e5
        Y += rng.normal(0, 2500, Y.shape)
        table = fit_many(x, Y, "lorentzian", unit_x="A", unit_y="atoms")
        about = {"scan": "map#1", "observable": "atom_number", "along": "coil_current"}
        return replace(table, slices=tuple(places), slice_units=dict.fromkeys(axes, "ms"), about=about)

    return make
