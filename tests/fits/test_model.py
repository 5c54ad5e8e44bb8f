from __future__ import annotations

import re
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.errors import FitError
from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many
from nightfold.fits.model import Model

from .examples import EXAMPLES, TIME

lmfit_models: Any = pytest.importorskip("lmfit").models

Array = NDArray[np.float64]
DECAY = EXAMPLES["exponential"]
PLAIN: dict[str, Any] = {"weights": "equal", "robust": False}


def decay(x: Array, height: float, tau: float) -> Array:
    return np.asarray(height * np.exp(-x / tau))


@pytest.mark.parametrize("linear", [None, ("height",), ()])
def test_plain_function_gives_what_the_built_in_model_gives(linear: tuple[str, ...] | None) -> None:
    y = DECAY.noisy(1, 0.05)
    start = {"tau": 5.0} if linear != () else {"tau": 5.0, "height": 1.0}
    mine = fit_curve(TIME, y, Model(decay, linear=linear, start=start), unit_x="ms", **PLAIN)
    built_in = fit_curve(TIME, y, "exponential", **PLAIN)
    assert mine.model == "decay"
    for name, twin in (("height", "amplitude"), ("tau", "lifetime")):
        assert mine.estimates[name].value == pytest.approx(built_in.estimates[twin].value, rel=1e-7)
        assert mine.estimates[name].stderr == pytest.approx(built_in.estimates[twin].stderr, rel=1e-6)
    assert mine.predict(TIME) == pytest.approx(built_in.predict(TIME))
    assert list(mine.covariance.index) == ["height", "tau"]


def test_the_full_recipe_does_with_a_plain_function_what_it_does_with_the_built_in_model() -> None:
    y = DECAY.curve() * (1 + 0.05 * np.random.default_rng(3).normal(size=len(TIME)))
    y[9] += 1.0
    mine = fit_curve(TIME, y, Model(decay, start={"tau": 5.0}))
    built_in = fit_curve(TIME, y, "exponential")
    assert mine.outliers == built_in.outliers == (9,)
    for name, twin in (("height", "amplitude"), ("tau", "lifetime")):
        one, other = mine.estimates[name], built_in.estimates[twin]
        assert one.value == pytest.approx(other.value, abs=0.02 * other.stderr)
        assert one.stderr == pytest.approx(other.stderr, rel=0.02)
        assert one.interval(0.6827) == pytest.approx(other.interval(0.6827), abs=0.1 * other.stderr)


def test_start_may_be_worked_out_from_the_data_or_given_late() -> None:
    y = DECAY.noisy(1, 0.05)
    from_data = Model(decay, start=lambda x, y: {"tau": float(np.ptp(x)) / 3})
    assert fit_curve(TIME, y, from_data).estimates["tau"].value == pytest.approx(12.0, rel=0.1)
    late = fit_curve(TIME, y, Model(decay), start={"tau": 8.0})
    assert late.estimates["tau"].value == pytest.approx(12.0, rel=0.1)


def test_fixed_and_background() -> None:
    y = DECAY.noisy(1, 0.02) + 0.7
    result = fit_curve(
        TIME,
        y,
        Model(decay, start={"tau": 8.0}),
        background="flat",
        fixed={"height": 2.0},
        unit_y="atoms",
        **PLAIN,
    )
    assert result.estimates["height"].stderr == 0.0
    assert result.estimates["offset"].value == pytest.approx(0.7, abs=0.05)
    assert result.estimates["offset"].unit == "atoms"
    twin = fit_curve(TIME, y, "exponential", background="flat", fixed={"amplitude": 2.0}, **PLAIN)
    assert result.estimates["tau"].stderr == pytest.approx(twin.estimates["lifetime"].stderr, rel=1e-5)


def test_line_at_a_huge_offset_with_numeric_derivatives() -> None:
    x = 384.23e12 + np.linspace(-20e6, 20e6, 41)
    y = (
        1.0
        - 0.6 / (1 + (2 * (x - 384.230001e12) / 6e6) ** 2)
        + 0.01 * np.random.default_rng(2).normal(size=41)
    )

    def line(x: Array, c: float, w: float, a: float, o: float) -> Array:
        return np.asarray(o + a / (1 + (2 * (x - c) / w) ** 2))

    mine = fit_curve(x, y, Model(line, start={"c": 384.23e12, "w": 5e6}), **PLAIN)
    built_in = fit_curve(x, y, "lorentzian", **PLAIN)
    assert mine.estimates["c"].value == pytest.approx(built_in.estimates["center"].value, abs=10.0)
    assert mine.estimates["c"].stderr == pytest.approx(built_in.estimates["center"].stderr, rel=1e-5)


def test_many_sets_with_a_plain_function() -> None:
    Y = DECAY.noisy(8, 0.05, (3,))
    table = fit_many(TIME, Y, Model(decay, start={"tau": 8.0}))
    twin = fit_many(TIME, Y, "exponential")
    assert table.estimates["tau"].value == pytest.approx(twin.estimates["lifetime"].value, rel=1e-6)


@pytest.mark.parametrize(
    ("model", "message"),
    [
        (lambda: Model(decay), "decay: no start value for tau; give start={'tau': …}"),
        (lambda: Model(decay, linear=["tau"], start={"tau": 3.0}), "linear: decay is not linear in tau"),
        (lambda: Model(decay, linear=["b"]), "linear: decay has no parameter 'b'; there are height, tau"),
        (lambda: Model(lambda x: x), "model: found no parameters, wanted a function f(x, a, b, …)"),
        (lambda: Model(lambda x, *p: x), "model: found *args or **kwargs, wanted a function f(x, a, b, …)"),
        (lambda: Model(lambda x, a: 1 / 0, start={"a": 1.0}), "the function failed at a=1: division by zero"),
        (
            lambda: Model(lambda x, offset: x * offset),
            "model has its own offset or slope; use background='none'",
        ),
    ],
)
def test_models_that_cannot_be_fitted(model: Any, message: str) -> None:
    with pytest.raises(FitError, match=re.escape(message)):
        fit_curve(TIME, DECAY.noisy(1, 0.05), model(), background="flat")


def test_a_fit_that_leads_nowhere_is_not_trusted() -> None:
    def useless(x: Array, a: float, b: float) -> Array:
        return np.asarray(a * x**0 + 0.0 * b * b)

    result = fit_curve(TIME, DECAY.noisy(1, 0.05), Model(useless, start={"b": 3.0}))
    assert not result.trusted
    (warning,) = [warning for warning in result.warnings if warning.code == "no-feature"]
    assert warning.message.startswith("useless follows the data hardly better than a constant (F test, p =")


def test_lmfit_model_with_its_own_guess() -> None:
    example = EXAMPLES["lorentzian"]
    y = example.noisy(5, 0.03) - 1.1
    model = lmfit_models.LorentzianModel()
    theirs = model.fit(-y, model.guess(-y, x=example.x), x=example.x)
    mine = fit_curve(example.x, -y, model, **PLAIN)
    assert set(mine.estimates) == {"amplitude", "center", "sigma"}
    for name, estimate in mine.estimates.items():
        assert estimate.value == pytest.approx(theirs.params[name].value, rel=1e-4)
        assert estimate.stderr == pytest.approx(theirs.params[name].stderr, rel=1e-3)


def test_composite_lmfit_model_with_prefix() -> None:
    example = EXAMPLES["gaussian"]
    y = example.noisy(5, 0.03)
    model = lmfit_models.GaussianModel(prefix="line_") + lmfit_models.LinearModel(prefix="back_")
    start = {"line_center": 32.0, "line_sigma": 0.7}
    mine = fit_curve(example.x, y, model, start=start, **PLAIN)
    built_in = fit_curve(example.x, y, "gaussian", background="sloped", **PLAIN)
    assert mine.estimates["line_center"].value == pytest.approx(built_in.estimates["center"].value, rel=1e-7)
    assert mine.estimates["back_slope"].stderr == pytest.approx(built_in.estimates["slope"].stderr, rel=1e-4)


def test_lmfit_parameters_set_not_to_vary_must_be_fixed() -> None:
    model = lmfit_models.GaussianModel()
    model.set_param_hint("sigma", value=0.7, vary=False)
    example = EXAMPLES["gaussian"]
    with pytest.raises(FitError, match=re.escape("sigma is set not to vary; give fixed={'sigma': 0.7}")):
        fit_curve(example.x, example.curve(), model)
