"""Errors that points share: their part of the uncertainties of a fit, and whether intervals cover."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from nightfold import FitTable, fit_curve, fit_many
from nightfold.errors import FitError
from nightfold.fits.engine.arrays import Floats
from nightfold.scans.relative import known_stderr, level_at, ratio_of, shared_errors

TRUTH = {"center": 0.1, "fwhm": 1.2, "amplitude": -0.5, "offset": 1.0}
X = np.linspace(-3.0, 3.0, 60)
PLAIN: dict[str, Any] = {"weights": "equal", "robust": False}


def dip(x: Floats) -> Floats:
    return np.asarray(1.0 - 0.5 / (1.0 + (2 * (x - 0.1) / 1.2) ** 2))


def blocks(size: float, count: int = 4) -> Floats:
    """Return shared errors of neighbours on the axis, (60, count)."""
    return np.repeat(np.eye(count), 60 // count, axis=0) * size


def scan(seed: int, noise: float, *, shuffled: bool = False) -> tuple[Floats, Floats, Floats]:
    """Return ratios, their stderr and the errors they share: a machine loses a fifth, a reference every 11 shots."""
    rng = np.random.default_rng(seed)
    reference = np.arange(67) % 11 == 0
    times = np.arange(67) * 20.0
    machine = 1e5 * (1 - 0.2 * times / times[-1])
    order = rng.permutation(60) if shuffled else np.arange(60)
    shots, moments = times[~reference], times[reference]
    y = dip(X)[order] * machine[~reference] * (1 + 0.03 * rng.normal(size=60))
    seen = machine[reference] * (1 + noise * rng.normal(size=7))
    stated = 0.2 * noise * seen
    level = level_at(shots, moments, seen, stated, 1800.0)
    ratio, stderr = ratio_of(y, 0.01 * y, level)
    known = known_stderr(moments, seen, stated, 1800.0)
    errors = shared_errors(shots, moments, known, 1800.0, ratio, level.value)
    back = np.argsort(order)
    return ratio[back], stderr[back], errors[back]


def scans(noise: float, count: int = 160, **how: Any) -> tuple[Floats, Floats, Floats]:
    made = [scan(seed, noise, **how) for seed in range(count)]
    return tuple(np.stack([each[part] for each in made]) for part in range(3))  # type: ignore[return-value]


def inside(table: FitTable, level: float) -> dict[str, float]:
    found = {}
    for name, truth in TRUTH.items():
        low, high = table.estimates[name].interval(level)
        found[name] = float(np.mean((low <= truth) & (truth <= high)))
    return found


@pytest.mark.parametrize("how", [{}, {"shuffled": True}])
@pytest.mark.parametrize("noise", [0.03, 0.06])
def test_intervals_cover_where_shots_share_reference_shots(noise: float, how: dict[str, Any]) -> None:
    Y, stderr, errors = scans(noise, **how)
    plain = fit_many(X, Y, "lorentzian", full=True, stderr=stderr)
    table = fit_many(X, Y, "lorentzian", full=True, stderr=stderr, shared=errors)
    before, at68, at95 = inside(plain, 0.95), inside(table, 0.6827), inside(table, 0.95)
    print(f"{noise=} {how}: 95 before {before}\n  68 now {at68}\n  95 now {at95}")
    assert before["offset"] < 0.78
    assert min(at95.values()) > 0.82
    assert min(at68.values()) > 0.54
    assert max(at68.values()) < 0.83
    assert np.mean(list(at95.values())) > 0.91


def test_negligible_errors_change_nothing() -> None:
    y = scan(3, 0.03)[0]
    for options in ({}, PLAIN, {"stderr": 0.03, "weights": "given"}):
        plain = fit_curve(X, y, "lorentzian", **options)
        fit = fit_curve(X, y, "lorentzian", shared=blocks(1e-9), **options)
        assert plain.shared_stderr == {}
        for name, estimate in fit.estimates.items():
            assert estimate.value == plain.estimates[name].value
            assert estimate.interval(0.9) == pytest.approx(plain.estimates[name].interval(0.9), rel=1e-9)
            assert fit.shared_stderr[name] < 1e-6 * estimate.stderr
        assert fit.covariance_matrix == pytest.approx(plain.covariance_matrix, rel=1e-9)


@pytest.mark.parametrize("weighted", [False, True])
def test_the_covariance_is_that_of_least_squares_with_these_errors(weighted: bool) -> None:
    rng = np.random.default_rng(5)
    stated = np.linspace(0.01, 0.03, 60) if weighted else np.ones(60)
    L = rng.normal(size=(60, 3)) * 0.01
    y = dip(X) + 0.02 * rng.normal(size=60)
    options: dict[str, Any] = {"robust": False, "weights": "given", "stderr": stated} if weighted else PLAIN
    held = {"center": 0.1, "fwhm": 1.2}
    fit = fit_curve(X, y, "lorentzian", fixed=held, shared=L, **options)
    J = np.stack([2 * (1 - dip(X)), np.ones(60)], axis=1) / stated[:, None]
    response = np.linalg.pinv(J)
    left, errors = y / stated, L / stated[:, None]
    across = np.eye(60) - J @ response
    scatter = left @ across @ left
    own = (scatter - np.trace(errors.T @ across @ errors)) / 58
    assert 0.2 < own / (scatter / 58) < 0.95  # nothing was clipped
    theirs = response @ errors @ errors.T @ response.T
    assert fit.free_names == ("amplitude", "offset")
    assert fit.covariance_matrix == pytest.approx(own * response @ response.T + theirs, rel=1e-6)
    assert [fit.shared_stderr[name] for name in fit.free_names] == pytest.approx(
        np.sqrt(np.diagonal(theirs)), rel=1e-6
    )
    assert fit.shared_stderr["center"] == 0


def test_an_error_of_all_points_alike_moves_the_offset_alone() -> None:
    y = dip(X) + 0.01 * np.random.default_rng(2).normal(size=60)
    fit = fit_curve(X, y, "lorentzian", shared=np.full((60, 1), 0.05))
    plain = fit_curve(X, y, "lorentzian")
    assert fit.shared_stderr["offset"] == pytest.approx(0.05, rel=1e-3)
    assert fit.shared_stderr["center"] < 1e-6
    assert fit.estimates["center"].stderr == pytest.approx(plain.estimates["center"].stderr, rel=1e-6)
    assert fit.estimates["offset"].stderr == pytest.approx(
        np.hypot(0.05, plain.estimates["offset"].stderr), rel=1e-3
    )


def test_a_scale_of_all_points_alike_reaches_what_follows_from_the_estimates() -> None:
    x = np.linspace(0.0, 3.0, 30)
    y = np.exp(-x) * (1 + 0.01 * np.random.default_rng(1).normal(size=30))
    fit = fit_curve(x, y, "exponential", shared=0.1 * y[:, None])
    plain = fit_curve(x, y, "exponential")
    assert fit.shared_stderr["amplitude"] == pytest.approx(0.1 * fit.estimates["amplitude"].value, rel=0.02)
    assert fit.derived["half_life"].stderr == pytest.approx(plain.derived["half_life"].stderr, rel=0.05)
    time = blocks(0.02, 2)[15:45]
    fit = fit_curve(x, y, "exponential", shared=time)
    assert fit.shared_stderr["half_life"] == pytest.approx(
        np.log(2) * fit.shared_stderr["lifetime"], rel=1e-6
    )
    assert fit.derived["half_life"].stderr == pytest.approx(
        np.log(2) * fit.estimates["lifetime"].stderr, rel=1e-6
    )


def test_many_are_as_one_by_one_with_holes_and_in_any_order() -> None:
    Y, _, errors = scans(0.03, 4)
    Y[1, 7], Y[2, 20:25] = np.nan, np.nan
    turn = np.random.default_rng(1).permutation(60)
    for options in ({}, PLAIN):
        table = fit_many(X, Y, "lorentzian", full=True, shared=errors, **options)
        for row in range(4):
            one = fit_curve(X[turn], Y[row][turn], "lorentzian", shared=errors[row][turn], **options)
            for name in TRUTH:
                assert table.shared_stderr[name][row] == pytest.approx(one.shared_stderr[name], rel=1e-5)
                assert table.estimates[name].stderr[row] == pytest.approx(
                    one.estimates[name].stderr, rel=1e-5
                )


def test_what_is_not_known_counts_as_nothing_and_is_said() -> None:
    y = scan(3, 0.03)[0]
    errors = np.full((60, 2), np.nan)
    fit = fit_curve(X, y, "lorentzian", shared=errors)
    assert all(np.isnan(part) for part in fit.shared_stderr.values())
    assert fit.estimates["offset"].stderr == fit_curve(X, y, "lorentzian").estimates["offset"].stderr


def test_errors_of_another_shape_are_refused() -> None:
    with pytest.raises(
        FitError, match=r"shared: found shape \(59, 2\), wanted \(60, m\) for m shared errors"
    ):
        fit_curve(X, dip(X), "lorentzian", shared=np.zeros((59, 2)))
    with pytest.raises(FitError, match="shared: found an infinite value"):
        fit_curve(X, dip(X), "lorentzian", shared=np.full((60, 1), np.inf))
    with pytest.raises(FitError, match="shared: found values that are not numbers"):
        fit_curve(X, dip(X), "lorentzian", shared=[["a"]])
