from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many
from nightfold.fits.model import Model

lmfit: Any = pytest.importorskip("lmfit")
Array = NDArray[np.float64]
X = np.linspace(0.0, 10.0, 41)
NOISE = 0.02 * np.random.default_rng(5).normal(size=41)


def decay(x: Array, height: float, rate: float, rest: float) -> Array:
    return np.asarray(height * np.exp(-rate * x) + rest)


def codes(found: Any) -> list[str]:
    return [warning.code for warning in found.warnings]


def plain(x: Array, y: Array, model: Any, **how: Any) -> Any:
    return fit_curve(x, y, model, weights="equal", robust=False, **how)


@pytest.mark.parametrize("start", [1e-3, 0.05, 0.7, 30.0, 500.0])
def test_a_start_far_off_leads_to_the_same_minimum(start: float) -> None:
    found = plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, Model(decay, start={"rate": start}))
    wanted = plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, "exponential", background="flat")
    assert found.estimates["rate"].value == pytest.approx(1 / wanted.estimates["lifetime"].value, rel=1e-8)
    assert found.residual_stderr == pytest.approx(wanted.residual_stderr, rel=1e-10)


def test_a_minimum_that_is_not_the_lowest_is_left() -> None:
    def wave(x: Array, a: float, b: float, f: float) -> Array:
        return np.asarray(a * np.cos(2 * np.pi * f * x) + b * np.sin(2 * np.pi * f * x))

    y = wave(X, 1.0, 0.5, 0.31) + NOISE
    found = plain(X, y, Model(wave, start={"f": 0.031}))
    assert found.estimates["f"].value == pytest.approx(0.31, abs=0.005)


def test_each_set_of_many_goes_its_own_way() -> None:
    Y = np.stack([decay(X, 2.0, rate, 0.3) + NOISE for rate in (0.2, 0.9, 4.0)])
    table = fit_many(X, Y, Model(decay, start={"rate": 100.0}), weights="equal", robust=False)
    assert table.converged.all()
    assert table.estimates["rate"].value == pytest.approx([0.2, 0.9, 4.0], rel=0.1)
    for row, y in enumerate(Y):
        alone = plain(X, y, Model(decay, start={"rate": 100.0}))
        assert alone.estimates["rate"].value == pytest.approx(table.estimates["rate"].value[row], rel=1e-8)


def test_bounds_of_an_lmfit_model_hold() -> None:
    model = lmfit.Model(decay)
    model.set_param_hint("rate", value=0.3, min=0.1, max=0.5)
    found = plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, model)
    assert found.estimates["rate"].value == 0.5
    assert "at-bound" in codes(found)
    model.set_param_hint("rate", value=0.3, min=0.1, max=5.0)
    inside = plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, model)
    free = plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, Model(decay, start={"rate": 0.3}))
    assert inside.estimates["rate"].value == pytest.approx(free.estimates["rate"].value, rel=1e-8)
    assert "at-bound" not in codes(inside)


def test_fixed_parameters_and_stderr_count() -> None:
    y = decay(X, 2.0, 0.7, 0.3) + NOISE
    errors = np.where(X < 5, 0.02, 0.05)
    found = fit_curve(
        X,
        y,
        Model(decay, start={"rate": 2.0}),
        stderr=errors,
        weights="given",
        fixed={"rest": 0.3},
        robust=False,
    )
    built_in = fit_curve(
        X,
        y,
        "exponential",
        stderr=errors,
        weights="given",
        background="flat",
        fixed={"offset": 0.3},
        robust=False,
    )
    assert found.estimates["rest"].stderr == 0
    assert 1 / found.estimates["rate"].value == pytest.approx(built_in.estimates["lifetime"].value, rel=1e-8)
    assert found.estimates["height"].stderr == pytest.approx(built_in.estimates["amplitude"].stderr, rel=1e-6)


def test_a_function_that_fails_away_from_its_start_does_not_end_there() -> None:
    def root(x: Array, a: float, b: float) -> Array:
        return np.asarray(a * np.sqrt(b - x))  # nan below b = 10

    y = root(X, 1.0, 12.0) + NOISE
    found = plain(X, y, Model(root, start={"b": 60.0}))
    assert found.estimates["b"].value == pytest.approx(12.0, abs=0.2)


def test_no_minimum_is_said() -> None:
    def endless(x: Array, a: float, b: float) -> Array:
        return np.asarray(a * np.exp(b * x / 1e300))

    assert not plain(X, decay(X, 2.0, 0.7, 0.3) + NOISE, Model(endless, start={"b": 1.0})).trusted


def test_no_nonlinear_parameter_at_all() -> None:
    found = plain(X, 2.0 * X + 1.0 + NOISE, Model(lambda x, a, b: a * x + b))
    wanted = np.polyfit(X, 2.0 * X + 1.0 + NOISE, 1)
    assert [e.value for e in found.estimates.values()] == pytest.approx(wanted, rel=1e-10)
