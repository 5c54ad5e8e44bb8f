from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.stats import norm, t

from nightfold.fits.engine.mixture import Mixture, t_quantile
from nightfold.fits.engine.uncertainty import mixed_interval


def some(count: int, laws: int, dof: float, seed: int = 1) -> Mixture:
    rng = np.random.default_rng(seed)
    weight = rng.dirichlet(np.full(laws, 0.5), size=count)
    scale = 10.0 ** rng.uniform(-6, 6, (count, 1))
    q, spread = rng.normal(size=(count, laws)) * scale, rng.uniform(0.01, 3, (count, laws)) * scale
    return Mixture(q, spread, weight, np.full(count, dof))


@pytest.mark.parametrize("dof", [1.0, 3.0, 40.0, math.inf])
@pytest.mark.parametrize("probability", [0.001, 0.025, 0.16, 0.5, 0.84, 0.9999])
def test_quantiles_are_where_the_mixture_reaches_the_probability(probability: float, dof: float) -> None:
    mixture = some(12, 5, dof)
    found = mixture.quantile(probability)
    for row in range(12):
        law = norm if math.isinf(dof) else t(dof)
        q, spread, weight = mixture.q[row], mixture.spread[row], mixture.weight[row]

        def below(at: float, law=law, q=q, spread=spread, weight=weight) -> float:  # type: ignore[no-untyped-def]
            return float(np.sum(weight * law.cdf((at - q) / spread)) - probability)

        parts = q + spread * law.ppf(probability)
        wanted = brentq(below, parts.min() - 1e-9, parts.max() + 1e-9, xtol=1e-14, rtol=1e-13)
        assert found[row] == pytest.approx(wanted, rel=1e-5, abs=1e-6 * spread.max())


def test_one_law_is_student_t() -> None:
    one = Mixture(np.array([[2.0]]), np.array([[0.5]]), np.ones((1, 1)), np.array([7.0]))
    assert one.quantile(0.975)[0] == pytest.approx(t.ppf(0.975, 7, 2.0, 0.5))
    low, high = mixed_interval(np.array([math.exp(2.0)]), one, "log", 0.9)
    assert (math.log(low[0]), math.log(high[0])) == pytest.approx(t.interval(0.9, 7, 2.0, 0.5))


def test_falling_links_swap_the_ends() -> None:
    one = Mixture(np.array([[2.0, 2.2]]), np.array([[0.5, 1.0]]), np.full((1, 2), 0.5), np.array([9.0]))
    low, high = mixed_interval(np.array([0.5]), one, "reciprocal", 0.6)
    assert 1 / high[0] == pytest.approx(one.quantile(0.2)[0])
    assert 1 / low[0] == pytest.approx(one.quantile(0.8)[0])


def test_laws_without_weight_do_not_count() -> None:
    two = Mixture(
        np.array([[1.0, np.nan]]), np.array([[0.1, np.inf]]), np.array([[1.0, 0.0]]), np.array([5.0])
    )
    assert two.quantile(0.9)[0] == pytest.approx(t.ppf(0.9, 5, 1.0, 0.1))


def test_fixed_and_unknown_quantities() -> None:
    fixed = Mixture(np.full((1, 3), 4.0), np.zeros((1, 3)), np.full((1, 3), 1 / 3), np.array([5.0]))
    assert fixed.quantile(0.9)[0] == 4.0
    unknown = Mixture(np.full((1, 2), 4.0), np.array([[1.0, np.inf]]), np.full((1, 2), 0.5), np.array([5.0]))
    assert (unknown.quantile(0.1)[0], unknown.quantile(0.9)[0]) == (-math.inf, math.inf)
    assert np.isnan(
        Mixture(np.full((1, 2), np.nan), np.ones((1, 2)), np.full((1, 2), 0.5), np.ones(1)).quantile(0.5)[0]
    )
    assert t_quantile(0.3, np.array([0.0]))[0] == -math.inf


def test_equal_when_all_numbers_are() -> None:
    one, same, other = some(3, 4, 5.0), some(3, 4, 5.0), some(3, 4, 5.0, seed=2)
    assert one == same
    assert one != other
    assert one.take(slice(1, 2)).q.shape == (1, 4)
