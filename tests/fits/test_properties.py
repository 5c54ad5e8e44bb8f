"""What must not change the answer, and what must change it in step."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.fits.curve import fit_curve
from nightfold.fits.result import FitResult

from .examples import EXAMPLES, Example

SEEDS = st.integers(0, 10_000)
SCALES = st.floats(-9, 9).map(lambda power: 10.0**power)
QUICK = settings(max_examples=12, deadline=None)
ALL = pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)


def close(one: float, other: float, stderr: float) -> bool:
    """Agreement to a ten-thousandth of the uncertainty."""
    return abs(one - other) <= 1e-4 * stderr + 1e-9 * abs(other)


def fit(example: Example, x: np.ndarray, y: np.ndarray, **options: Any) -> FitResult:
    return fit_curve(x, y, example.model, background=example.background, **options)


@given(seed=SEEDS, shift=st.floats(-1e6, 1e6))
@QUICK
@pytest.mark.parametrize("model", ["lorentzian", "gaussian"])
def test_shifting_x_shifts_the_center_alone(model: str, seed: int, shift: float) -> None:
    example = EXAMPLES[model]
    y = example.noisy(seed, 0.05)
    one, other = fit(example, example.x, y), fit(example, example.x + shift, y)
    for name, estimate in one.estimates.items():
        moved = other.estimates[name]
        assert moved.value - (shift if name == "center" else 0.0) == pytest.approx(
            estimate.value, rel=1e-5, abs=1e-6
        )
        assert moved.stderr == pytest.approx(estimate.stderr, rel=1e-5)


@given(seed=SEEDS, scale=SCALES)
@QUICK
@ALL
def test_scaling_y_scales_what_is_in_its_unit(example: Example, seed: int, scale: float) -> None:
    y = example.noisy(seed, 0.05)
    one, other = fit(example, example.x, y, unit_y="Y"), fit(example, example.x, y * scale, unit_y="Y")
    for name, estimate in one.estimates.items():
        factor = scale if estimate.unit.startswith("Y") else 1.0
        assert close(other.estimates[name].value / factor, estimate.value, estimate.stderr)
        assert other.estimates[name].stderr / factor == pytest.approx(estimate.stderr, rel=1e-4)
    assert [w.code for w in one.warnings] == [w.code for w in other.warnings]


POWERS = {"X": 1, "1/X": -1, "Y": 0, "Y/X": -1, "rad": 0}


@given(seed=SEEDS, scale=SCALES)
@QUICK
@ALL
def test_converting_x_before_or_after_is_the_same(example: Example, seed: int, scale: float) -> None:
    y = example.noisy(seed, 0.05)
    units = {"unit_x": "X", "unit_y": "Y"}
    one, other = fit(example, example.x, y, **units), fit(example, example.x * scale, y, **units)
    for name, estimate in one.estimates.items():
        factor = scale ** POWERS[estimate.unit]
        assert close(other.estimates[name].value / factor, estimate.value, estimate.stderr)
        assert other.estimates[name].stderr / factor == pytest.approx(estimate.stderr, rel=1e-4)
        for limit, twin in zip(estimate.interval(0.9), other.estimates[name].interval(0.9), strict=True):
            assert math.isinf(limit) or close(twin / factor, limit, estimate.stderr)


@given(seed=SEEDS, data=st.data())
@QUICK
@ALL
def test_order_of_shots_changes_nothing(example: Example, seed: int, data: st.DataObject) -> None:
    y = example.noisy(seed, 0.2)
    order = np.random.default_rng(data.draw(SEEDS)).permutation(len(y))
    one, other = fit(example, example.x, y), fit(example, example.x[order], y[order])
    assert one.estimates == other.estimates
    assert {int(order[i]) for i in other.outliers} == set(one.outliers)
    assert [w.code for w in one.warnings] == [w.code for w in other.warnings]


@given(seed=SEEDS, level=st.floats(0.3, 0.99))
@QUICK
@ALL
def test_intervals_hold_the_value_and_grow_with_the_level(example: Example, seed: int, level: float) -> None:
    result = fit(example, example.x, example.noisy(seed, 0.1))
    for estimate in result.estimates.values():
        low, high = estimate.interval(level)
        wider_low, wider_high = estimate.interval(level + (1 - level) / 2)
        assert wider_low <= low <= estimate.value <= high <= wider_high


@given(seed=SEEDS)
@QUICK
@ALL
def test_no_nearby_curve_is_better(example: Example, seed: int) -> None:
    y = example.noisy(seed, 0.1)
    result = fit(example, example.x, y, weights="equal", robust=False)
    best = float(np.sum((y - result.predict(example.x)) ** 2))
    assert best <= np.sum((y - example.curve()) ** 2)
    assert best == pytest.approx(result.residual_stderr**2 * result.dof)
