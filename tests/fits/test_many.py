from __future__ import annotations

import re

import numpy as np
import pytest

from nightfold.errors import FitError
from nightfold.fits.curve import fit_curve
from nightfold.fits.many import FitTable, fit_many

from .examples import EXAMPLES, Example


def assert_same_as_single(table: FitTable, example: Example, Y: np.ndarray, **options: object) -> None:
    for row, y in enumerate(Y):
        single = fit_curve(example.x, y, example.model, background=example.background, **options)  # type: ignore[arg-type]
        for name, estimate in single.estimates.items():
            column = table.estimates[name]
            assert column.value[row] == pytest.approx(estimate.value, rel=1e-7)
            assert column.stderr[row] == pytest.approx(estimate.stderr, rel=1e-5)
            assert [limit[row] for limit in column.interval(0.95)] == pytest.approx(
                estimate.interval(0.95), rel=1e-6
            )
        assert bool(table.trusted[row]) == single.trusted
        assert [w.code for w in table.warnings[row]] == [w.code for w in single.warnings]
        assert table.n[row] == single.n
        assert table.residual_stderr[row] == pytest.approx(single.residual_stderr)
        assert table.covariances[row] == pytest.approx(single.covariance_matrix, rel=1e-4, abs=1e-12)


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_batched_equals_single(example: Example) -> None:
    Y = example.noisy(21, 0.08, (24,))
    table = fit_many(example.x, Y, example.model, background=example.background, full=True)
    assert len(table) == 24
    assert_same_as_single(table, example, Y)


@pytest.mark.parametrize("model", ["lorentzian", "damped-oscillation"])
def test_batched_equals_single_with_holes_and_fixed(model: str) -> None:
    example = EXAMPLES[model]
    Y = example.noisy(22, 0.05, (20,))
    Y[np.random.default_rng(5).random(Y.shape) < 0.1] = np.nan
    fixed = {"offset": 1.0}
    table = fit_many(example.x, Y, model, background=example.background, fixed=fixed, full=True)
    assert_same_as_single(table, example, Y, fixed=fixed)


def test_batched_equals_single_with_stderr_row_by_row() -> None:
    example = EXAMPLES["gaussian"]
    Y = example.noisy(23, 0.05, (18,))
    stderr = np.random.default_rng(6).uniform(0.02, 0.1, Y.shape)
    table = fit_many(example.x, Y, "gaussian", stderr=stderr, weights="given", background="sloped", full=True)
    for row in range(len(Y)):
        single = fit_curve(
            example.x, Y[row], "gaussian", stderr=stderr[row], weights="given", background="sloped"
        )
        for name, estimate in single.estimates.items():
            assert table.estimates[name].value[row] == pytest.approx(estimate.value, rel=1e-6)
            assert table.estimates[name].stderr[row] == pytest.approx(estimate.stderr, rel=1e-4)


def test_rows_with_too_few_points_are_nan_and_not_trusted() -> None:
    example = EXAMPLES["lorentzian"]
    Y = example.noisy(24, 0.05, (3,))
    Y[1, 3:] = np.nan
    table = fit_many(example.x, Y, "lorentzian", full=True)
    assert list(table.trusted) == [True, False, True]
    assert np.isnan(table.estimates["center"].value[1])
    assert np.isnan(table.estimates["center"].interval(0.9)[0][1])
    (warning,) = table.warnings[1]
    assert warning.code == "too-few-points"
    assert warning.message == "3 points, but lorentzian has 4 free parameters; fix one or add shots"
    assert table.result(1).n == 3


def test_single_results_can_be_taken_out() -> None:
    example = EXAMPLES["lorentzian"]
    Y = example.noisy(25, 0.05, (3,))
    table = fit_many(example.x, Y, "lorentzian", unit_x="G")
    result = table.result(2)
    assert result.y == pytest.approx(Y[2])
    assert result.estimates["center"].unit == "G"
    assert result.predict(example.x) == pytest.approx(example.curve(), abs=0.1)
    assert "3 fits of center, fwhm, amplitude, offset" in repr(table)


def test_no_rows_give_an_empty_table() -> None:
    table = fit_many([1.0, 2.0, 3.0, 4.0, 5.0], np.zeros((0, 5)), "lorentzian")
    assert len(table) == 0
    assert table.trusted.shape == table.estimates["center"].value.shape == (0,)


def test_columns_must_match_x() -> None:
    with pytest.raises(
        FitError, match=re.escape("Y: found shape (2, 4), wanted one column for each of the 3 x")
    ):
        fit_many([1.0, 2.0, 3.0], np.zeros((2, 4)), "lorentzian")
