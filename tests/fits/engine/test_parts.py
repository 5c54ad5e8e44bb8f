from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.engine.batched import combine, dot, gram, inverse
from nightfold.fits.engine.grid import choose_starts, make_grid, orthonormal
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.numeric import derivative, linear_parameters, suitable_step
from nightfold.fits.engine.reduction import MOST_BINS, reduce_points
from nightfold.fits.models import find_model
from nightfold.fits.models.shape import Window

Array = NDArray[np.float64]
RANDOM = np.random.default_rng(8)


@pytest.mark.parametrize("size", [1, 40])
@pytest.mark.parametrize("k", [1, 2, 3])
def test_batched_products_are_those_of_numpy(size: int, k: int) -> None:
    rows, other = RANDOM.normal(size=(size, k, 9)), RANDOM.normal(size=(size, 2, 9))
    vector, c = RANDOM.normal(size=(size, 9)), RANDOM.normal(size=(size, k))
    assert gram(rows, other) == pytest.approx(np.einsum("mkn,mln->mkl", rows, other))
    assert gram(rows, rows) == pytest.approx(np.einsum("mkn,mln->mkl", rows, rows))
    assert dot(rows, vector) == pytest.approx(np.einsum("mkn,mn->mk", rows, vector))
    assert combine(c, rows) == pytest.approx(np.einsum("mk,mkn->mn", c, rows))
    assert inverse(gram(rows, rows)) == pytest.approx(np.linalg.inv(gram(rows, rows)), rel=1e-8)


@pytest.mark.parametrize("k", [1, 2, 3])
def test_singular_matrices_have_finite_inverses(k: int) -> None:
    assert np.isfinite(inverse(np.zeros((2, k, k)))).all()
    assert np.isfinite(inverse(np.ones((2, k, k)))).all()


def test_bringing_repeats_together_keeps_inner_products() -> None:
    u = np.repeat(np.linspace(0, 1, 6), [1, 3, 2, 1, 1, 4])
    roots = RANDOM.uniform(0.5, 2.0, len(u))
    reduction = reduce_points(u, roots)
    y = RANDOM.normal(size=len(u))
    template = np.sin(reduction.u)
    assert len(reduction.u) == 6
    assert reduction.whiten(roots * y) @ (reduction.roots * template) == pytest.approx(
        np.sum(roots**2 * y * np.sin(u))
    )


def test_long_scans_are_averaged_in_bins_for_the_grid() -> None:
    u = np.linspace(0.0, 1.0, 3000)
    reduction = reduce_points(u, np.ones(3000))
    assert len(reduction.u) == MOST_BINS
    assert reduction.whiten(u[None])[0] / reduction.roots == pytest.approx(reduction.u)


def test_templates_are_orthonormal_and_degenerate_ones_vanish() -> None:
    flat = np.full((1, 8), 8**-0.5)
    columns = RANDOM.normal(size=(5, 2, 8))
    columns[3] = 4.0
    made = orthonormal(columns, flat)
    assert np.abs(made @ flat.T).max() < 1e-12
    products = gram(made, made)
    assert products[[0, 1, 2, 4]] == pytest.approx(np.broadcast_to(np.eye(2), (4, 2, 2)))
    assert not made[3].any()


def test_two_lines_give_two_starts_and_one_line_gives_one() -> None:
    shape = find_model("lorentzian")
    u = np.linspace(-0.5, 0.5, 41)
    layout = Layout(shape, "flat", frozenset())
    theta = shape.grid(Window(-0.5, 0.5, 0.025, 0.025, 41, "flat"))
    reduction = reduce_points(u, np.ones(41))
    grid = make_grid(layout, reduction, theta, "flat")
    one = shape.function(u, -0.2, 0.08, 1.0)
    two = one + shape.function(u, 0.25, 0.08, 0.9)
    z = np.array([one, two])
    level = ((z - z.mean(axis=1, keepdims=True)) ** 2).sum(axis=1)
    sets, points = choose_starts(layout, theta, level[:, None] - grid.gains(z), level)
    assert list(sets) == [0, 1, 1]
    assert theta[points, 0] == pytest.approx([-0.2, -0.2, 0.25], abs=0.03)


def test_numeric_derivative_of_a_function_with_a_huge_offset() -> None:
    x = np.linspace(-1.0, 1.0, 21) * 2e7

    def line(at: Array) -> Array:
        return np.asarray(1 / (1 + ((x - (at[0] - 384e12)) / at[1]) ** 2))

    at = np.array([384e12 + 1e6, 6e6])
    step = suitable_step(line, at, 0, 384e8, -np.inf, np.inf)
    assert 1e2 < step < 1e5
    d = (x - 1e6) / 6e6
    wanted = 2 * d / 6e6 / (1 + d**2) ** 2
    assert derivative(line, at, 0, step) == pytest.approx(wanted, rel=1e-5, abs=1e-13)
    assert derivative(line, at, 1, 1e3) == pytest.approx(wanted * d, rel=1e-7, abs=1e-15)


def test_steps_stay_inside_bounds() -> None:
    step = suitable_step(lambda at: np.array([at[0] ** 2]), np.array([1.0]), 0, 0.5, 0.9, 5.0)
    assert 1.0 - 2 * step > 0.9


@pytest.mark.parametrize(
    ("function", "linear"),
    [
        (lambda p: p[0] * np.exp(-p[1] * np.arange(5.0)) + p[2], [0, 2]),
        (lambda p: p[0] * p[1] * np.arange(5.0) + p[2], [0, 2]),
        (lambda p: p[0] ** 2 + p[1] * np.arange(5.0), [1]),
        (lambda p: p[0] - p[1] * 4000.0 - np.arctan(p[2] / np.arange(3000.0, 3005.0)), [0, 1]),
        (lambda p: np.arange(5.0) + 0.0 * p[0], []),
    ],
)
def test_linear_parameters_are_found_out(function: object, linear: list[int]) -> None:
    assert callable(function)
    assert linear_parameters(function, np.array([1.3, 0.7, 2.1]), [0, 1, 2]) == linear
