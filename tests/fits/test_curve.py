from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import curve_fit

from nightfold.fits.curve import fit_curve
from nightfold.fits.result import FitResult

from .examples import EXAMPLES, FIELD, SHORT, TIME, Example

Array = NDArray[np.float64]


def lorentzian(x: Array, c: float, w: float, a: float, o: float) -> Array:
    return a / (1 + ((x - c) / (w / 2)) ** 2) + o


def gaussian(x: Array, c: float, w: float, a: float, o: float, s: float) -> Array:
    sigma = w / math.sqrt(8 * math.log(2))
    return np.asarray(a * np.exp(-0.5 * ((x - c) / sigma) ** 2) + o + s * (x - c))


def exponential(x: Array, a: float, t: float) -> Array:
    return np.asarray(a * np.exp(-x / t))


def two_body(x: Array, a: float, k: float) -> Array:
    return a / (1 + k * x)


def three_body(x: Array, a: float, k: float) -> Array:
    return np.asarray(a * (1 + 2 * k * x) ** -0.5)


def oscillation(x: Array, a: float, f: float, t: float, p: float, o: float) -> Array:
    return np.asarray(a * np.exp(-x / t) * np.cos(2 * np.pi * f * x + p) + o)


PLAIN: dict[str, Any] = {"weights": "equal", "robust": False}
"""Ordinary least squares."""
INDEPENDENT: dict[str, Any] = {
    "lorentzian": lorentzian,
    "gaussian": gaussian,
    "exponential": exponential,
    "two-body": two_body,
    "three-body": three_body,
    "damped-oscillation": oscillation,
}


@pytest.mark.parametrize("model", INDEPENDENT)
@pytest.mark.parametrize("weighted", [None, "relative", "absolute"])
def test_agrees_with_scipy_on_values_and_covariance(model: str, weighted: str | None) -> None:
    example = EXAMPLES[model]
    y = example.noisy(7, 0.05)
    stderr = np.random.default_rng(3).uniform(0.03, 0.09, len(y))
    options = PLAIN
    if weighted:
        how = {"stderr": stderr, "weights": "given", "absolute_stderr": weighted == "absolute"}
        options = {**PLAIN, **how}
    result = fit_curve(example.x, y, model, background=example.background, **options)
    values, covariance = curve_fit(
        INDEPENDENT[model],
        example.x,
        y,
        p0=list(example.truth.values()),
        sigma=stderr if weighted else None,
        absolute_sigma=weighted == "absolute",
        xtol=1e-14,
        ftol=1e-14,
        gtol=1e-14,
    )
    assert list(result.estimates) == list(example.truth)
    for j, estimate in enumerate(result.estimates.values()):
        assert estimate.value == pytest.approx(values[j], rel=1e-6)
        assert estimate.stderr == pytest.approx(math.sqrt(covariance[j, j]), rel=1e-4)
    assert result.covariance.to_numpy() == pytest.approx(covariance, rel=1e-3, abs=1e-9)
    assert list(result.covariance.columns) == list(example.truth)


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_exact_data_give_the_truth_back(example: Example) -> None:
    result = fit_curve(example.x, example.curve(), example.model, background=example.background)
    for name, truth in example.truth.items():
        assert result.estimates[name].value == pytest.approx(truth, rel=1e-8)
    assert result.predict(example.x) == pytest.approx(example.curve(), abs=1e-9)
    assert result.trusted


def test_lifetime_of_loading_has_negative_amplitude() -> None:
    y = 3.0 - 3.0 * np.exp(-TIME / 9.0)
    result = fit_curve(TIME, y, "exponential", background="flat")
    assert result.estimates["amplitude"].value == pytest.approx(-3.0)
    assert result.estimates["lifetime"].value == pytest.approx(9.0)


@pytest.mark.parametrize("phase", [-3.1, -1.0, 0.0, 1.5, 3.1])
def test_oscillation_amplitude_is_positive_and_phase_wrapped(phase: float) -> None:
    for start in (0.0, 0.3):
        x = SHORT + start
        y = oscillation(x, 0.8, 4.1, 0.9, phase, 1.0)
        result = fit_curve(x, y, "damped-oscillation")
        assert result.estimates["amplitude"].value == pytest.approx(0.8)
        assert result.estimates["phase"].value == pytest.approx(phase)


def test_undamped_oscillation_has_an_infinite_decay_time() -> None:
    y = 2.0 + np.cos(2 * np.pi * 3.3 * SHORT + 0.4)
    y += 0.002 * (-1.0) ** np.arange(len(y)) * SHORT
    result = fit_curve(SHORT, y, "damped-oscillation")
    low, high = result.estimates["decay_time"].interval(0.95)
    assert low > 20
    assert high == math.inf
    assert result.trusted


def test_dip_at_an_optical_frequency() -> None:
    x = 384.2304844685e12 + np.linspace(-20e6, 20e6, 41)
    y = 1.0 - 0.6 / (1 + (2 * (x - 384.2304862e12) / 6.0666e6) ** 2)
    y += 0.01 * np.random.default_rng(2).normal(size=41)
    result = fit_curve(x, y, "lorentzian", unit_x="Hz")
    center = result.estimates["center"]
    assert abs(center.value - 384.2304862e12) < 5 * center.stderr
    assert 2e4 < center.stderr < 3e5
    assert result.estimates["fwhm"].value == pytest.approx(6.0666e6, rel=0.1)
    assert result.trusted


@pytest.mark.parametrize(("scale_x", "scale_y"), [(1e-12, 1e12), (1e9, 1e-9)])
def test_tiny_and_giant_scales(scale_x: float, scale_y: float) -> None:
    example = EXAMPLES["damped-oscillation"]
    result = fit_curve(example.x * scale_x, example.noisy(1, 0.05) * scale_y, example.model)
    assert result.estimates["frequency"].value * scale_x == pytest.approx(4.1, rel=0.02)
    assert result.estimates["amplitude"].value / scale_y == pytest.approx(0.8, rel=0.2)


def test_small_line_on_a_huge_offset() -> None:
    example = EXAMPLES["lorentzian"]
    y = 1e9 + example.noisy(4, 0.02)
    result = fit_curve(example.x, y, "lorentzian")
    assert result.estimates["center"].value == pytest.approx(33.1, abs=0.05)
    assert result.estimates["offset"].value == pytest.approx(1e9 + 1.1, abs=0.1)


def fixed_fits() -> list[Any]:
    cases: list[tuple[str, tuple[str, ...]]] = []
    for model, example in EXAMPLES.items():
        cases += [(model, (name,)) for name in example.truth]
    cases += [("damped-oscillation", ("phase", "offset")), ("damped-oscillation", ("amplitude", "phase"))]
    cases += [
        ("gaussian", ("slope", "amplitude")),
        ("gaussian", ("center", "fwhm")),
        ("exponential", ("amplitude",)),
    ]
    return cases


@pytest.mark.parametrize(("model", "names"), fixed_fits(), ids=str)
def test_fixed_parameters_agree_with_scipy(model: str, names: tuple[str, ...]) -> None:
    example = EXAMPLES[model]
    y = example.noisy(11, 0.04)
    fixed = {name: example.truth[name] * 1.01 for name in names}
    result = fit_curve(example.x, y, model, background=example.background, fixed=fixed, **PLAIN)
    free = [name for name in example.truth if name not in fixed]

    def curve(x: Array, *values: float) -> Array:
        at = fixed | dict(zip(free, values, strict=True))
        return np.asarray(INDEPENDENT[model](x, *(at[name] for name in example.truth)))

    p0 = [example.truth[name] for name in free]
    values, covariance = curve_fit(curve, example.x, y, p0=p0, xtol=1e-14, ftol=1e-14, gtol=1e-14)
    for j, name in enumerate(free):
        assert result.estimates[name].value == pytest.approx(values[j], rel=1e-5)
        assert result.estimates[name].stderr == pytest.approx(math.sqrt(covariance[j, j]), rel=1e-3)
    for name in names:
        assert (result.estimates[name].value, result.estimates[name].stderr) == (fixed[name], 0.0)
        assert result.estimates[name].interval(0.9) == (fixed[name], fixed[name])
    assert list(result.covariance.index) == free
    assert result.dof == len(y) - len(free)


def test_everything_fixed_leaves_the_scatter() -> None:
    example = EXAMPLES["exponential"]
    y = example.noisy(5, 0.1)
    result = fit_curve(example.x, y, "exponential", fixed=example.truth, **PLAIN)
    assert result.covariance.shape == (0, 0)
    assert result.residual_stderr == pytest.approx(np.sqrt(np.mean((y - example.curve()) ** 2)))


def two_dips() -> Array:
    first = lorentzian(FIELD, 31.5, 0.7, -0.8, 1.0)
    return np.asarray(first + lorentzian(FIELD, 34.5, 0.7, -0.5, 0.0))


def test_start_tells_which_of_two_dips() -> None:
    deep = fit_curve(FIELD, two_dips(), "lorentzian")
    shallow = fit_curve(FIELD, two_dips(), "lorentzian", start={"center": 34.4, "fwhm": 0.6, "offset": 1.0})
    assert deep.estimates["center"].value == pytest.approx(31.5, abs=0.1)
    assert shallow.estimates["center"].value == pytest.approx(34.5, abs=0.1)
    assert shallow.settings["start"] == {"center": 34.4, "fwhm": 0.6, "offset": 1.0}


def test_points_may_come_in_any_order_with_repeats_and_gaps() -> None:
    example = EXAMPLES["lorentzian"]
    x = np.tile(example.x, 3)
    y = np.tile(example.curve(), 3) + 0.1 * np.random.default_rng(9).normal(size=len(x))
    reference = fit_curve(x, y, "lorentzian")
    order = np.random.default_rng(1).permutation(len(x))
    holes_x, holes_y = np.append(x[order], [np.nan, 33.0]), np.append(y[order], [2.0, np.nan])
    other = fit_curve(holes_x, holes_y, "lorentzian")
    assert other.estimates == reference.estimates
    assert other.warnings == reference.warnings
    assert other.n == len(x)
    assert list(other.used) == list(range(len(x)))
    assert other.residuals == pytest.approx(reference.residuals[order], abs=1e-12)


def test_the_same_data_give_the_same_numbers() -> None:
    example = EXAMPLES["damped-oscillation"]
    y = example.noisy(3, 0.3)
    one, two = (fit_curve(example.x, y, example.model) for _ in range(2))
    assert one.estimates == two.estimates
    assert one.warnings == two.warnings


def test_given_stderr_is_insisted_on_only_when_asked() -> None:
    example = EXAMPLES["lorentzian"]
    y, stderr = example.noisy(3, 0.05), np.linspace(0.01, 0.2, len(example.x))
    equal = fit_curve(example.x, y, "lorentzian", weights="equal")
    assert fit_curve(example.x, y, "lorentzian", stderr=stderr, weights="equal").estimates == equal.estimates
    given = fit_curve(example.x, y, "lorentzian", stderr=stderr, weights="given")
    scaled = fit_curve(example.x, y, "lorentzian", stderr=stderr * 7, weights="given")
    assert given.estimates["center"].value != equal.estimates["center"].value
    assert scaled.estimates["center"].stderr == pytest.approx(given.estimates["center"].stderr)
    absolute = fit_curve(example.x, y, "lorentzian", stderr=stderr, absolute_stderr=True)
    wider = fit_curve(example.x, y, "lorentzian", stderr=stderr * 7, absolute_stderr=True)
    assert wider.estimates["center"].stderr == pytest.approx(7 * absolute.estimates["center"].stderr)
    low, high = absolute.estimates["center"].interval(0.95)
    assert (high - low) / 2 == pytest.approx(1.959964 * absolute.estimates["center"].stderr)


def test_points_without_stderr_are_left_out_when_it_is_used() -> None:
    example = EXAMPLES["lorentzian"]
    stderr = np.full(len(example.x), 0.05)
    stderr[3] = np.nan
    y = example.noisy(3, 0.05)
    assert fit_curve(example.x, y, "lorentzian", stderr=stderr, weights="given").n == 30
    assert fit_curve(example.x, y, "lorentzian", stderr=stderr).n == 31


def test_units_follow_from_those_of_x_and_y() -> None:
    def units(result: FitResult) -> dict[str, str]:
        return {name: estimate.unit for name, estimate in result.estimates.items()}

    y = EXAMPLES["lorentzian"].noisy(1, 0.05)
    result = fit_curve(FIELD, y, "lorentzian", background="sloped", unit_x="G", unit_y="atoms")
    assert units(result) == {
        "center": "G",
        "fwhm": "G",
        "amplitude": "atoms",
        "offset": "atoms",
        "slope": "atoms/G",
    }
    result = fit_curve(
        SHORT, EXAMPLES["damped-oscillation"].noisy(1, 0.05), "damped-oscillation", unit_x="ms"
    )
    assert units(result) == {
        "amplitude": "",
        "frequency": "1/ms",
        "decay_time": "ms",
        "phase": "rad",
        "offset": "",
    }


def test_result_tells_what_was_done() -> None:
    example = EXAMPLES["lorentzian"]
    result = fit_curve(
        example.x, example.noisy(1, 0.05), "lorentzian", fixed={"offset": 1.1}, weights="equal"
    )
    assert (result.model, result.background, result.n, result.dof) == ("lorentzian", "flat", 31, 28)
    assert result.settings == {
        "weights": "equal",
        "absolute_stderr": False,
        "robust": True,
        "fixed": {"offset": 1.1},
        "start": {},
    }
    assert result.outliers == ()
    assert result.residual_stderr == pytest.approx(np.sqrt(np.sum(result.residuals**2) / 28))
    assert "lorentzian, 31 points: center=33" in repr(result)


def test_goes_on_in_lmfit() -> None:
    for example in EXAMPLES.values():
        y = example.noisy(2, 0.05)
        result = fit_curve(example.x, y, example.model, background=example.background, **PLAIN)
        model, parameters = result.to_lmfit()
        assert model.eval(parameters, x=example.x) == pytest.approx(result.predict(example.x))
        again = model.fit(y, parameters, x=example.x)
        for name, estimate in result.estimates.items():
            assert again.params[name].value == pytest.approx(estimate.value, rel=1e-4)
            assert again.params[name].stderr == pytest.approx(estimate.stderr, rel=0.01)


def test_lmfit_keeps_fixed_parameters_fixed() -> None:
    example = EXAMPLES["lorentzian"]
    result = fit_curve(example.x, example.noisy(2, 0.05), "lorentzian", fixed={"fwhm": 1.2})
    _, parameters = result.to_lmfit()
    assert not parameters["fwhm"].vary
    assert parameters["center"].vary
