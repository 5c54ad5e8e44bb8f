from __future__ import annotations

import numpy as np
import pytest

from nightfold.fits.engine.variance import LEARNT, STATED, WITH_STATED, relative, shapes, weigh


def test_equal_scatter_is_among_the_laws_and_weighs_all_alike() -> None:
    curve, used = np.array([[3.0, 1.0, 0.0, 2.0]]), np.ones((1, 4), dtype=bool)
    variance = shapes(LEARNT, curve, None, used)
    assert variance.shape == (1, len(LEARNT), 4)
    assert np.array_equal(variance[0, 0], np.ones(4))
    assert np.array_equal(weigh(LEARNT, variance, used)[0, 0], np.ones(4))


def test_variance_grows_with_the_square_of_the_curve_and_keeps_its_mean() -> None:
    curve, used = np.array([[3.0, 1.0, -2.0, 50.0]]), np.array([[True, True, True, False]])
    variance = shapes(LEARNT, curve, None, used)[0]
    wanted = 1 - LEARNT.rho + LEARNT.rho * 9 / (14 / 3)
    assert variance[:, 0] == pytest.approx(wanted)
    assert variance[:, used[0]].mean(axis=1) == pytest.approx(np.ones(len(LEARNT)))


def test_weights_are_capped_where_the_law_is_not() -> None:
    curve, used = np.array([[1.0, 0.5, 1e-4]]), np.ones((1, 3), dtype=bool)
    variance = shapes(LEARNT, curve, None, used)
    weights = weigh(LEARNT, variance, used)[0]
    assert variance[0, -1, 0] / variance[0, -1, 2] > 500
    assert (weights.max(axis=1) / weights.min(axis=1)).max() == pytest.approx(10.0)
    assert weights[:, 0] == pytest.approx(1 / variance[0, :, 0])


def test_stated_variances_have_laws_of_their_own() -> None:
    curve, used = np.array([[3.0, 1.0, 2.0]]), np.array([[True, True, True]])
    stated = np.array([[1.0, 4.0, 1.0]])
    alone = shapes(STATED, curve, stated, used)[0]
    assert alone == pytest.approx(np.array([[0.5, 2.0, 0.5]]))
    both = shapes(WITH_STATED, curve, stated, used)[0]
    assert both[-1] == pytest.approx(alone[0])
    halves = both[WITH_STATED.tau == 0.5]
    assert halves[0] == pytest.approx(0.5 + 0.5 * alone[0])
    shares = [np.exp(WITH_STATED.prior[WITH_STATED.tau == tau]).sum() for tau in (0.0, 0.5, 1.0)]
    assert shares == pytest.approx([shares[0]] * 3)


def test_points_not_used_weigh_nothing() -> None:
    used = np.array([[True, True, False]])
    variance = shapes(LEARNT, np.array([[1.0, 2.0, 3.0]]), None, used)
    assert (weigh(LEARNT, variance, used)[:, :, 2] == 0).all()


def test_a_curve_that_is_zero_everywhere_has_equal_scatter() -> None:
    used = np.ones((2, 3), dtype=bool)
    assert relative(np.zeros((2, 3)), used) == pytest.approx(np.ones((2, 3)))
