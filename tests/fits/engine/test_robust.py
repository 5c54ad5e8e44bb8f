from __future__ import annotations

import numpy as np
import pytest

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many

from ..examples import EXAMPLES, TIME

MULTIPLICATIVE = 0.08


def decays(sets: int, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.asarray(np.exp(-TIME / 12.0) * (1 + MULTIPLICATIVE * rng.normal(size=(sets, len(TIME)))))


def test_clean_scans_with_scatter_that_grows_with_the_signal_have_no_outliers() -> None:
    table = fit_many(TIME, decays(400, 5), "exponential", full=True)
    assert np.count_nonzero(table.outcome.outlier.any(axis=1)) <= 8


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_clean_scans_of_every_model_have_none(example) -> None:  # type: ignore[no-untyped-def]
    table = fit_many(
        example.x, example.noisy(8, 0.05, (300,)), example.model, background=example.background, full=True
    )
    assert np.count_nonzero(table.outcome.outlier.any(axis=1)) <= 6


def test_an_outlier_small_for_large_signals_is_found_where_the_signal_is_small() -> None:
    Y = decays(60, 6)
    late = 24  # the curve is 0.08 there
    Y[:, late] += 0.08
    table = fit_many(TIME, Y, "exponential", full=True)
    assert table.outcome.outlier[:, late].mean() > 0.9
    assert np.count_nonzero(np.delete(table.outcome.outlier, late, axis=1)) <= 3
    early = decays(60, 6)
    early[:, 0] += 0.08
    assert fit_many(TIME, early, "exponential", full=True).outcome.outlier[:, 0].mean() < 0.1


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_outliers_are_listed_left_out_and_said(example) -> None:  # type: ignore[no-untyped-def]
    y = example.noisy(3, 0.03)
    y[[4, 19]] += [1.5, -1.2]
    result = fit_curve(example.x, y, example.model, background=example.background, unit_x="G")
    assert result.outliers == (4, 19)
    assert result.n == len(y) - 2
    assert not set(result.used) & {4, 19}
    assert list(result.outlier_y) == [y[4], y[19]]
    (warning,) = [w for w in result.warnings if w.code == "outliers"]
    assert warning.advisory
    assert warning.message.startswith("2 shots left out as outliers, at ")
    assert result.trusted
    rest = np.delete(np.arange(len(y)), [4, 19])
    without = fit_curve(example.x[rest], y[rest], example.model, background=example.background)
    for name, estimate in result.estimates.items():
        assert estimate.value == pytest.approx(without.estimates[name].value, abs=0.1 * estimate.stderr)
        assert estimate.stderr == pytest.approx(without.estimates[name].stderr, rel=0.1)
    kept = fit_curve(example.x, y, example.model, background=example.background, robust=False)
    assert kept.outliers == ()
    assert kept.n == len(y)


def test_an_outlier_does_not_hide_the_line() -> None:
    example = EXAMPLES["lorentzian"]
    y = example.noisy(4, 0.05)
    y[3] -= 6.0  # least squares puts a narrow line there
    plain = fit_curve(example.x, y, "lorentzian", robust=False, weights="equal")
    assert abs(plain.estimates["center"].value - 33.1) > 1
    result = fit_curve(example.x, y, "lorentzian")
    assert result.outliers == (3,)
    assert result.estimates["center"].value == pytest.approx(33.1, abs=0.15)


def test_never_more_than_a_seventh() -> None:
    rng = np.random.default_rng(9)
    Y = np.exp(-TIME / 12.0) + 0.02 * rng.normal(size=(50, len(TIME)))
    Y += 3.0 * (rng.random(Y.shape) < 0.3)
    out = fit_many(TIME, Y, "exponential", full=True).outcome.outlier
    assert out.sum(axis=1).max() <= int(0.15 * len(TIME))


def test_shots_that_repeat_a_value_are_no_outliers() -> None:
    x = np.repeat(np.linspace(0.0, 3.0, 12), 3)
    y = np.exp(-x) + 0.02 * np.random.default_rng(2).normal(size=36)
    y[15:18] += 0.3
    assert not set(fit_curve(x, y, "exponential").outliers) & {15, 16, 17}


def test_weights_and_robust_are_separate_choices() -> None:
    example = EXAMPLES["lorentzian"]
    y = example.noisy(3, 0.03)
    y[19] += 1.5
    rest = np.delete(np.arange(len(y)), 19)
    equal = fit_curve(example.x, y, "lorentzian", weights="equal")
    twin = fit_curve(example.x[rest], y[rest], "lorentzian", weights="equal", robust=False)
    for name, estimate in equal.estimates.items():
        assert estimate.value == pytest.approx(twin.estimates[name].value, rel=1e-7)
        assert estimate.stderr == pytest.approx(twin.estimates[name].stderr, rel=1e-6)
        assert estimate.interval(0.95) == pytest.approx(twin.estimates[name].interval(0.95), rel=1e-6)


def test_a_burst_of_far_points_does_not_become_the_line() -> None:
    example = EXAMPLES["gaussian"]
    for seed in range(8):
        y = example.noisy(seed, 0.05)
        y[[25, 26, 27]] -= [2.0, 1.8, 1.9]  # deeper, and as wide as a line may be
        result = fit_curve(example.x, y, "gaussian")
        assert result.outliers == (25, 26, 27)
        assert result.estimates["center"].value == pytest.approx(32.4, abs=0.2)


def test_a_narrow_line_is_not_taken_for_outliers() -> None:
    x = np.linspace(-5.0, 5.0, 31)
    rng = np.random.default_rng(3)
    Y = 1.0 - 0.8 / (1 + (2 * (x - 1.3) / 0.6) ** 2) + 0.04 * rng.normal(size=(100, 31))
    table = fit_many(x, Y, "lorentzian", full=True)
    assert np.count_nonzero(table.outcome.outlier.any(axis=1)) <= 3
    assert np.abs(table.estimates["center"].value - 1.3).max() < 0.2
