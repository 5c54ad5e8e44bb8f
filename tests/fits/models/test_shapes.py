from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.errors import NotFound
from nightfold.fits.engine.frame import Frame
from nightfold.fits.engine.layout import Layout
from nightfold.fits.models import MODEL_NAMES, find_model, list_models
from nightfold.fits.models.damped_oscillation import PhasedOscillation
from nightfold.fits.models.exponential import ExponentialFromZero
from nightfold.fits.models.shape import LineShape, Window

Array = NDArray[np.float64]
THETA = {
    "lorentzian": [0.07, -1.1],
    "gaussian": [0.07, -1.1],
    "voigt": [0.07, -1.1, 0.4],
    "rabi-line": [0.07, -1.1],
    "asymmetric-lorentzian": [0.07, -1.1, -0.6],
    "exponential": [0.9],
    "two-body": [0.9],
    "three-body": [0.9],
    "one-two-body": [0.9, 0.6],
    "one-three-body": [0.9, 0.6],
    "damped-oscillation": [2.3, 1.4, 0.7],
    "cosine": [2.3, 0.7],
    "ramsey": [2.3, 1.4, 0.7],
    "rabi-flop": [2.3, 1.4],
    "expansion": [0.6],
    "landau-zener": [-0.9],
    "saturation": [-0.9],
}
SHAPES: list[LineShape] = [*list_models(), PhasedOscillation(), ExponentialFromZero()]


def central(function: object, at: Array, j: int) -> Array:
    step = np.zeros_like(at)
    step[..., j] = 1e-5
    assert callable(function)
    difference: Array = (function(at + step) - function(at - step)) / 2e-5
    return difference


@pytest.mark.parametrize("shape", SHAPES, ids=lambda s: type(s).__name__)
def test_derivatives_match_differences(shape: LineShape) -> None:
    u = np.linspace(-0.4 if shape.kind == "resonance" else 0.0, 1.0, 17)[None]
    theta = np.array([THETA[shape.name][: len(shape.theta)]])
    columns, derivatives = shape.basis(u, theta)
    assert np.array_equal(shape.columns(u, theta), columns)
    for j in range(theta.shape[1]):
        wanted = central(lambda t: shape.columns(u, t), theta, j)
        assert derivatives[:, j] == pytest.approx(wanted, rel=1e-6, abs=1e-7)


@pytest.mark.parametrize("background", ["none", "flat", "sloped"])
@pytest.mark.parametrize("fixed", [frozenset[str](), frozenset({"offset"})], ids=["free", "offset fixed"])
@pytest.mark.parametrize("shape", SHAPES, ids=lambda s: type(s).__name__)
def test_reported_derivatives_match_differences(
    shape: LineShape, background: str, fixed: frozenset[str]
) -> None:
    if fixed and background == "none":
        pytest.skip("no offset to fix")
    layout = Layout(shape, background, fixed)  # type: ignore[arg-type]
    frame = Frame(np.array([0.7]), np.array([2.5]), np.array([0.3]), np.array([1.9]))
    theta = np.array([THETA[shape.name][: len(shape.theta)]])
    c = np.array([[0.8, -0.5, 0.4, 0.3][: len(layout.column_names)]])
    q, dq = layout.report(theta, c, frame)
    assert q.shape == (1, len(layout.all_names))
    for j in range(theta.shape[1]):
        assert dq[:, :, j] == pytest.approx(
            central(lambda t: layout.report(t, c, frame)[0], theta, j), rel=1e-6, abs=1e-7
        )
    for j in range(c.shape[1]):
        wanted = central(lambda k: layout.report(theta, k, frame)[0], c, j)
        assert dq[:, :, theta.shape[1] + j] == pytest.approx(wanted, rel=1e-6, abs=1e-7)


@pytest.mark.parametrize("shape", list_models(), ids=lambda s: s.name)
def test_every_shape_says_what_it_is(shape: LineShape) -> None:
    assert shape.formula
    assert shape.source
    assert all(parameter.meaning for parameter in shape.parameters)
    assert shape.default_background in ("none", "flat")
    window = Window(0.0, 1.0, 0.05, 0.05, 21, "flat")
    grid = shape.grid(window)
    low, high = shape.bounds(window)
    assert grid.shape[1] == len(low) == len(high) == len(shape.theta)
    assert ((grid >= low) & (grid <= high)).all()


def test_names_are_those_of_the_docs() -> None:
    assert tuple(THETA) == MODEL_NAMES
    assert [shape.name for shape in list_models()] == list(THETA)
    assert find_model("lorentzian") is find_model("lorentzian")


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("lorentz", "no model is called 'lorentz'; did you mean lorentzian?"),
        ("two_body", "no model is called 'two_body'; did you mean two-body"),
        ("zzz", "there are lorentzian, gaussian"),
    ],
)
def test_unknown_name_suggests_the_nearest(name: str, message: str) -> None:
    with pytest.raises(NotFound, match=message):
        find_model(name)
