"""Every analytic derivative against differences of fourth order, at many coordinates up to the edges."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.engine.frame import Frame
from nightfold.fits.engine.numeric import derivative
from nightfold.fits.models import list_models
from nightfold.fits.models.asymmetric_lorentzian import AsymmetryAndWidth
from nightfold.fits.models.cosine import PhasedCosine
from nightfold.fits.models.damped_oscillation import PhasedOscillation
from nightfold.fits.models.expansion import Expansion, ExpansionOfSize, ExpansionOfVelocity
from nightfold.fits.models.exponential import ExponentialFromZero
from nightfold.fits.models.one_three_body import HeldOneThreeBody
from nightfold.fits.models.one_two_body import HeldOneTwoBody
from nightfold.fits.models.ramsey import PhasedRamsey
from nightfold.fits.models.shape import LineShape, Window

Array = NDArray[np.float64]
SHAPES: list[LineShape] = [
    *list_models(),
    AsymmetryAndWidth(),
    ExponentialFromZero(),
    ExpansionOfSize(),
    ExpansionOfVelocity(),
    HeldOneTwoBody(frozenset({"one_body_rate"})),
    HeldOneTwoBody(frozenset({"two_body_rate"})),
    HeldOneThreeBody(frozenset({"one_body_rate", "three_body_rate"})),
    PhasedCosine(),
    PhasedOscillation(),
    PhasedRamsey(),
]
ALL = pytest.mark.parametrize("shape", SHAPES, ids=lambda s: type(s).__name__)
COUNT = 60


def coordinates(shape: LineShape, rng: np.random.Generator) -> tuple[Array, Array]:
    """Return points u (n,) and theta (COUNT, P) all over what is searched, some of it at its edges."""
    low = -0.5 if shape.kind == "resonance" else 0.0
    u = np.linspace(low, low + 1.0, 23)
    window = Window(low, low + 1.0, 1 / 22, 1 / 22, 23, "flat")
    bottom, top = (np.maximum(np.minimum(end, 6.0), -6.0) for end in shape.bounds(window))
    theta = rng.uniform(bottom, top, (COUNT, len(bottom)))
    for j, coordinate in enumerate(shape.theta):
        if coordinate.floor or coordinate.ceiling:
            theta[: COUNT // 4, j] = bottom[j] + 1e-9 * coordinate.floor
            theta[COUNT // 4 : COUNT // 2, j] = top[j] - 1e-9 * coordinate.ceiling
        if coordinate.role == "angle":
            theta[:, j] = rng.uniform(-3.0, 3.0, COUNT)
        if coordinate.role == "frequency":
            theta[:, j] = rng.uniform(0.1, 6.0, COUNT)
        if coordinate.link == "not-negative" and coordinate.role == "rate":
            theta[:, j] = np.where(np.arange(COUNT) < 3, 1e-9, rng.uniform(0.0, 5.0, COUNT))
    if type(shape) is Expansion:
        u = u[1:]  # the root at x = 0 of a cloud without size has no derivative
    return u, theta


@ALL
def test_columns(shape: LineShape) -> None:
    u, theta = coordinates(shape, np.random.default_rng(5))
    columns, slopes = shape.basis(u[None], theta)
    assert np.allclose(shape.columns(u[None], theta), columns, rtol=1e-14, atol=1e-300)
    assert np.isfinite(columns).all()
    assert np.isfinite(slopes).all()
    bent = type(shape).__name__ in ("AsymmetricLorentzian", "AsymmetryAndWidth")
    for m, at in enumerate(theta):
        for j in range(len(at)):

            def column(t: Array) -> Array:
                return np.asarray(shape.columns(u[None], t[None])[0].ravel())

            wanted = slopes[m, j].ravel()
            size = max(float(np.abs(wanted).max()), float(np.abs(columns[m]).max()), 1e-3)
            assert off(column, at, j, wanted) < (1e-5 if bent else 1e-7) * size, (at, j)


def off(function: Callable[[Array], Array], at: Array, j: int, wanted: Array) -> float:
    """Return the distance between differences and a derivative, with the step that suits best."""
    with np.errstate(all="ignore"):
        found = [derivative(function, at, j, 10.0**power) for power in np.arange(-7.0, -1.9, 0.5)]
    return min(float(np.nan_to_num(np.abs(one - wanted), nan=np.inf).max()) for one in found)


@ALL
def test_reported_and_derived_numbers(shape: LineShape) -> None:
    rng = np.random.default_rng(6)
    _, theta = coordinates(shape, rng)
    frame = Frame(*(np.array([value]) for value in (0.7, 2.5, 0.3, 1.9)))
    c = rng.uniform(0.4, 1.4, (COUNT, len(shape.linear)))
    for at, coefficients in zip(theta, c, strict=True):
        point = np.concatenate([at, coefficients])

        def reported(p: Array, size: int = len(at)) -> Array:
            return np.asarray(shape.report(p[None, :size], p[None, size:], frame)[0][0])

        q, dq = shape.report(at[None], coefficients[None], frame)
        more, slopes = shape.derive(q)
        assert more.shape == (1, len(shape.derived))
        for j in range(len(point)):
            assert off(reported, point, j, dq[0, :, j]) < 1e-6 * (1 + np.abs(q).max())
        if not shape.derived or not np.isfinite(more).all():
            continue
        bends = np.array([link == "not-negative" for link in shape.links()])
        q = np.clip(np.where(bends, np.maximum(q, 0.01), q), -100.0, 100.0)
        _, slopes = shape.derive(q)
        for j in range(q.shape[1]):
            assert off(lambda v: shape.derive(v[None])[0][0], q[0], j, slopes[0, :, j]) < 1e-6 * (
                1 + np.abs(slopes).max()
            )


@ALL
def test_the_function_is_that_of_the_columns(shape: LineShape) -> None:
    """Reported values put into the plain formula give what the columns give."""
    from nightfold.fits.engine.links import to_value

    rng = np.random.default_rng(7)
    u, theta = coordinates(shape, rng)
    one, zero = np.ones(COUNT), np.zeros(COUNT)
    frame = Frame(zero, one, zero, one)
    c = rng.uniform(0.4, 1.4, (COUNT, len(shape.linear)))
    curve = np.einsum("ml,mln->mn", c, shape.columns(u[None], theta))
    q, _ = shape.report(theta, c, frame)
    for m in range(COUNT):
        values = [float(to_value(np.array(v), link)) for v, link in zip(q[m], shape.links(), strict=True)]
        if any(link == "root" and v < 0 for v, link in zip(q[m], shape.links(), strict=True)):
            continue
        size = max(float(np.abs(curve[m]).max()), 1e-6)
        with np.errstate(all="ignore"):
            assert shape.function(u, *values) == pytest.approx(curve[m], abs=2e-8 * size), values
