from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import norm, t

from nightfold.errors import FitError
from nightfold.fits.estimate import Estimate, EstimateColumn, compose_unit


@pytest.mark.parametrize("level", [0.1, 0.5, 0.6827, 0.95, 0.999])
def test_linear_interval_is_student_t(level: float) -> None:
    low, high = Estimate(5.0, 0.3, "G", dof=7).interval(level)
    assert (low, high) == pytest.approx(t.interval(level, 7, 5.0, 0.3))
    assert Estimate(5.0, 0.3, "G").interval(level) == pytest.approx(norm.interval(level, 5.0, 0.3))


def test_interval_of_a_width_is_symmetric_in_its_logarithm() -> None:
    low, high = Estimate(2.0, 0.4, "G", "log", dof=9).interval(0.95)
    assert low * high == pytest.approx(4.0)
    assert math.log(high / 2.0) == pytest.approx(0.2 * t.ppf(0.975, 9))


def test_interval_of_a_decay_time_is_symmetric_in_its_rate() -> None:
    low, high = Estimate(2.0, 0.4, "s", "reciprocal").interval(0.6827)
    assert 1 / low - 0.5 == pytest.approx(0.5 - 1 / high)
    assert Estimate(2.0, 3.0, "s", "reciprocal").interval(0.95)[1] == math.inf
    assert Estimate(math.inf, math.inf, "s", "reciprocal", spread=0.1).interval(0.95) == pytest.approx(
        (1 / 0.1959964, math.inf)
    )


def test_fixed_and_unknown() -> None:
    assert Estimate(0.3, 0.0, "s", "reciprocal").interval(0.9) == (0.3, 0.3)
    assert Estimate(0.3, math.inf, dof=0).interval(0.9) == (-math.inf, math.inf)


@pytest.mark.parametrize("level", [0.0, 1.0, 95.0, -0.1, math.nan])
def test_level_must_be_a_probability(level: float) -> None:
    with pytest.raises(FitError, match=r"interval: found level .*, wanted one between 0 and 1"):
        Estimate(1.0, 0.1).interval(level)


def test_column_is_the_same_number_by_number() -> None:
    value, spread = np.array([2.0, 3.0]), np.array([0.1, 0.2])
    column = EstimateColumn(value, value * spread, "G", "log", spread, np.array([5.0, np.inf]))
    low, high = column.interval(0.9)
    for row in range(2):
        assert column[row].interval(0.9) == pytest.approx((low[row], high[row]))
        assert column[row].unit == "G"


@pytest.mark.parametrize(
    ("pattern", "x", "y", "unit"),
    [
        ("x", "G", "atoms", "G"),
        ("y", "G", "atoms", "atoms"),
        ("1/x", "ms", "", "1/ms"),
        ("1/x", "", "atoms", ""),
        ("y/x", "G", "atoms", "atoms/G"),
        ("y/x", "G", "", "1/G"),
        ("y/x", "", "atoms", "atoms"),
        ("y/x", "kHz/s", "nK", "nK/(kHz/s)"),
        ("rad", "ms", "atoms", "rad"),
    ],
)
def test_units_are_composed(pattern: str, x: str, y: str, unit: str) -> None:
    assert compose_unit(pattern, x, y) == unit
