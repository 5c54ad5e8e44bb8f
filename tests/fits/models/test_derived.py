"""Derived numbers are what their names say, and their intervals cover."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import binom

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many
from nightfold.fits.models import find_model, list_models
from nightfold.fits.result import FitResult

Array = NDArray[np.float64]
X = np.linspace(0.0, 2.0, 41)
FIELD = np.linspace(4.0, 6.0, 41)


def exact(model: str, x: Array, *parameters: float, **options: object) -> FitResult:
    """Return the fit of a curve without scatter."""
    y = np.asarray(find_model(model).function(x, *parameters))
    return fit_curve(x, y, model, weights="equal", robust=False, **options)  # type: ignore[arg-type]


def test_every_derived_number_is_explained() -> None:
    for shape in list_models():
        names = [number.name for number in shape.derived]
        assert len(set(names)) == len(names)
        assert not {*names} & {parameter.name for parameter in shape.parameters}
        assert all(number.meaning for number in shape.derived)


@pytest.mark.parametrize("model", ["two-body", "three-body", "one-two-body", "one-three-body", "exponential"])
def test_times_of_losses(model: str) -> None:
    shape = find_model(model)
    rates = (0.7, 2.0)[: len(shape.parameters) - 1]
    derived = exact(model, X, 1.5, *rates, unit_x="s").derived
    for name, share in (("one_over_e_time", np.e), ("half_life", 2.0)):
        if name not in derived:
            assert model == "exponential"
            continue
        wanted = brentq(lambda t, s=share: float(shape.function(np.array(t), s, *rates)) - 1.0, 0.0, 100.0)
        assert derived[name].value == pytest.approx(wanted, rel=1e-6)
        assert derived[name].unit == "s"


def test_quality_of_a_resonance() -> None:
    result = exact("lorentzian", FIELD, 5.1, 0.3, 1.0)
    assert result.derived["quality_factor"].value == pytest.approx(17.0)
    assert result.derived["quality_factor"].unit == ""


def test_undamped_frequency_and_quality() -> None:
    derived = exact("damped-oscillation", X, 1.0, 3.0, 0.5, 0.4, unit_x="ms").derived
    f0 = np.hypot(3.0, 1 / np.pi)
    assert derived["undamped_frequency"].value == pytest.approx(f0)
    assert derived["undamped_frequency"].unit == "1/ms"
    assert derived["quality_factor"].value == pytest.approx(np.pi * f0 * 0.5)


def test_parts_of_a_voigt_width() -> None:
    derived = exact("voigt", FIELD, 5.1, 0.5, 1.0, 0.4).derived
    lorentzian, gaussian = derived["lorentzian_fwhm"].value, derived["gaussian_fwhm"].value
    assert lorentzian == pytest.approx(0.2, rel=1e-6)
    assert 0.5346 * lorentzian + np.sqrt(0.2166 * lorentzian**2 + gaussian**2) == pytest.approx(0.5, rel=1e-5)


def test_rabi_frequencies() -> None:
    derived = exact("rabi-line", FIELD, 5.1, 0.5, 1.0, unit_x="kHz").derived
    assert derived["rabi_frequency"].value == pytest.approx(0.5 / 1.5973707105694)
    assert derived["pulse_time"].value == pytest.approx(0.5 / derived["rabi_frequency"].value)
    assert (derived["rabi_frequency"].unit, derived["pulse_time"].unit) == ("kHz", "1/kHz")
    assert exact("rabi-flop", X, 1.0, 2.5, 0.7).derived["pi_time"].value == pytest.approx(0.2)


def test_a_cloud_that_seems_to_shrink_has_an_upper_limit() -> None:
    x = np.linspace(0.0, 10.0, 30)
    y = 20.0 - 0.01 * x**2 + 0.3 * np.random.default_rng(1).normal(size=30)
    result = fit_curve(x, y, "expansion", unit_x="ms", unit_y="um")
    velocity, square = result.estimates["velocity"], result.derived["velocity_squared"]
    assert velocity.value == 0.0
    assert np.isfinite(velocity.stderr)
    assert square.value < -2 * square.stderr
    assert square.unit == "(um/ms)^2"
    assert velocity.interval(0.6827) == (0.0, 0.0)
    low, high = velocity.interval(0.999999)
    assert low == 0.0
    assert high == pytest.approx(np.sqrt(max(square.interval(0.999999)[1], 0.0)))


def test_fixed_parameters_leave_derived_numbers_their_share() -> None:
    result = fit_curve(X, np.exp(-X) + 0.01 * np.sin(37 * X), "one-two-body", fixed={"one_body_rate": 0.0})
    assert result.derived["half_life"].stderr > 0
    fixed = {"amplitude": 1.0, "lifetime": 1.0}
    result = fit_curve(X, np.exp(-X) + 0.01 * np.sin(37 * X), "exponential", fixed=fixed)
    assert result.derived["half_life"].value == pytest.approx(np.log(2))
    assert result.derived["half_life"].stderr == pytest.approx(0.0, abs=1e-12)


CASES: dict[str, tuple[Array, tuple[float, ...], dict[str, float]]] = {
    "lorentzian": (FIELD, (5.1, 0.5, 1.0), {"quality_factor": 10.2}),
    "damped-oscillation": (
        X,
        (1.0, 3.0, 0.8, 0.4),
        {"undamped_frequency": float(np.hypot(3, 0.625 / np.pi))},
    ),
    "three-body": (X, (1.0, 2.0), {"half_life": 0.75}),
    "one-two-body": (X, (1.0, 1.0, 1.5), {"half_life": float(np.log1p(1 / 2.5))}),
    "rabi-flop": (X, (1.0, 2.5, 0.9), {"pi_time": 0.2}),
    "expansion": (X, (1.0, 0.8), {"velocity_squared": 0.64}),
    "voigt": (FIELD, (5.1, 0.5, 1.0, 0.5), {"lorentzian_fwhm": 0.25}),
}


@pytest.mark.parametrize("model", CASES)
@pytest.mark.parametrize("level", [0.6827, 0.95])
def test_intervals_of_derived_numbers_cover(model: str, level: float) -> None:
    x, parameters, wanted = CASES[model]
    curve = np.asarray(find_model(model).function(x, *parameters))
    Y = curve + 0.03 * np.random.default_rng(8).normal(size=(600, len(x)))
    table = fit_many(x, Y, model, weights="equal", robust=False)
    for name, truth in wanted.items():
        low, high = table.derived[name].interval(level)
        hits = int(np.count_nonzero((low <= truth) & (truth <= high)))
        assert binom.ppf(1e-4, 600, level) <= hits <= binom.ppf(1 - 1e-4, 600, level), hits / 600
