"""Parameters that are fixed or started from, where several of them share a coordinate."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import curve_fit

from nightfold.errors import FitError
from nightfold.fits.curve import fit_curve
from nightfold.fits.models import find_model

Array = NDArray[np.float64]
X = np.linspace(0.0, 2.0, 40)
TRUTH: dict[str, tuple[float, ...]] = {
    "voigt": (1.1, 0.4, -0.8, 0.4),
    "rabi-line": (1.1, 0.4, -0.8),
    "asymmetric-lorentzian": (1.1, 0.4, 0.8, 0.5),
    "one-two-body": (2.0, 0.5, 1.5),
    "one-three-body": (2.0, 0.5, 1.5),
    "cosine": (1.0, 2.3, 0.4),
    "ramsey": (1.0, 3.3, 1.2, 0.4),
    "rabi-flop": (1.0, 2.5, 1.5),
    "expansion": (0.5, 0.7),
    "landau-zener": (1.0, 0.3),
    "saturation": (2.0, 0.6),
}
CASES = [
    (model, names)
    for model in TRUTH
    for count in (1, 2)
    for names in combinations([p.name for p in find_model(model).parameters], count)
]


@pytest.mark.parametrize(("model", "names"), CASES, ids=str)
def test_fixed_parameters_agree_with_scipy(model: str, names: tuple[str, ...]) -> None:
    shape, truth = find_model(model), TRUTH[model]
    known = dict(zip((p.name for p in shape.parameters), truth, strict=True))
    y = np.asarray(shape.function(X, *truth)) + 0.01 * np.random.default_rng(4).normal(size=len(X))
    fixed = {name: 1.01 * known[name] for name in names}
    result = fit_curve(X, y, model, background="none", fixed=fixed, weights="equal", robust=False)
    free = [name for name in known if name not in fixed]
    for name, value in fixed.items():
        assert (result.estimates[name].value, result.estimates[name].stderr) == (value, 0.0)
    if not free:
        return

    def curve(x: Array, *values: float) -> Array:
        at = fixed | dict(zip(free, values, strict=True))
        return np.asarray(shape.function(x, *(at[name] for name in known)))

    p0 = [known[name] for name in free]
    values, covariance = curve_fit(curve, X, y, p0=p0, xtol=1e-14, ftol=1e-14, gtol=1e-14)
    for j, name in enumerate(free):
        assert result.estimates[name].value == pytest.approx(values[j], rel=1e-5)
        assert result.estimates[name].stderr == pytest.approx(np.sqrt(covariance[j, j]), rel=2e-3)
    assert result.predict(X) == pytest.approx(curve(X, *values), abs=1e-6)


@pytest.mark.parametrize("model", TRUTH)
def test_a_start_at_the_truth_leads_there(model: str) -> None:
    shape, truth = find_model(model), TRUTH[model]
    known = dict(zip((p.name for p in shape.parameters), truth, strict=True))
    y = np.asarray(shape.function(X, *truth))
    result = fit_curve(X, y, model, start=known, weights="equal", robust=False)
    for name, value in known.items():
        assert result.estimates[name].value == pytest.approx(value, rel=1e-6)


def test_a_width_alone_tells_an_asymmetric_line_where_to_look() -> None:
    narrow, wide = (
        np.asarray(find_model("lorentzian").function(X, c, w, 1.0)) for c, w in ((0.5, 0.1), (1.5, 0.6))
    )
    start = {"center": 0.5, "fwhm": 0.1}
    result = fit_curve(X, narrow + wide, "asymmetric-lorentzian", start=start, weights="equal", robust=False)
    assert result.estimates["center"].value == pytest.approx(0.5, abs=0.03)


@pytest.mark.parametrize("fixed", [{"one_body_rate": 0.0}, {"two_body_rate": 0.0}])
def test_a_loss_may_be_ruled_out(fixed: dict[str, float]) -> None:
    y = 2.0 * np.exp(-X) if "two_body_rate" in fixed else 2.0 / (1 + X)
    result = fit_curve(X, y, "one-two-body", fixed=fixed, weights="equal", robust=False)
    other = ({"one_body_rate", "two_body_rate"} - set(fixed)).pop()
    assert result.estimates[other].value == pytest.approx(1.0)


@pytest.mark.parametrize("model", ["one-two-body", "one-three-body"])
@pytest.mark.parametrize("pure", ["exponential", "body"])
def test_one_loss_alone_is_no_failure(model: str, pure: str) -> None:
    simple = "exponential" if pure == "exponential" else model.removeprefix("one-")
    y = np.asarray(find_model(simple).function(X, 2.0, 0.8)) + 0.001 * (-1.0) ** np.arange(40)
    result = fit_curve(X, y, model, weights="equal", robust=False)
    assert "at-bound" not in [warning.code for warning in result.warnings]
    one, body = result.estimates["one_body_rate"], result.estimates[find_model(model).parameters[2].name]
    gone, left, rate = (body, one, 1 / 0.8) if pure == "exponential" else (one, body, 0.8)
    low, high = gone.interval(0.95)
    assert low == 0.0
    assert high < 0.05
    assert left.value == pytest.approx(rate, rel=0.02)


@pytest.mark.parametrize("share", [0.0, 1.0])
def test_a_pure_line_is_a_voigt_line(share: float) -> None:
    pure = "lorentzian" if share else "gaussian"
    y = np.asarray(find_model(pure).function(X, 1.1, 0.4, 1.0)) + 0.002 * (-1.0) ** np.arange(40)
    result = fit_curve(X, y, "voigt", weights="equal", robust=False)
    assert "at-bound" not in [warning.code for warning in result.warnings]
    assert result.estimates["lorentzian_share"].value == pytest.approx(share, abs=0.02)
    low, high = result.estimates["lorentzian_share"].interval(0.95)
    assert 0.0 <= low <= high <= 1.0


@pytest.mark.parametrize("name", ["initial_size", "velocity"])
def test_sizes_and_velocities_of_zero_cannot_be_fixed(name: str) -> None:
    with pytest.raises(FitError, match="wanted a value greater than zero"):
        fit_curve(X, 1 + X, "expansion", fixed={name: 0.0})


def test_a_loss_before_the_start_stays_off_the_pole() -> None:
    x = np.linspace(-0.2, 2.0, 30)
    for model in ("one-two-body", "one-three-body"):
        y = np.asarray(find_model(model).function(x, 2.0, 0.5, 0.8))
        result = fit_curve(x, y, model, weights="equal", robust=False)
        assert result.predict(x) == pytest.approx(y, rel=1e-4)
