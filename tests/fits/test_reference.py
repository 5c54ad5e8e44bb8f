"""Certified least squares: NIST Statistical Reference Datasets, and the peak of the lmfit examples.

Sources, licences and digits: tests/reference/nist_strd/SOURCE.md and tests/reference/lmfit_test_peak/SOURCE.md.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.curve import fit_curve
from nightfold.fits.model import Model

from .strd import NAMES, digits, problem, read

lmfit: Any = pytest.importorskip("lmfit")
PEAK = Path(__file__).parents[1] / "reference" / "lmfit_test_peak" / "test_peak.dat"
Array = NDArray[np.float64]


def test_eckerle4_by_the_built_in_gaussian() -> None:
    certified = read("Eckerle4")
    result = fit_curve(certified.x, certified.y, "gaussian", background="none", weights="equal", robust=False)
    amplitude, fwhm = (result.estimates[name].value for name in ("amplitude", "fwhm"))
    to_sigma = 1 / math.sqrt(8 * math.log(2))
    b1, b2 = amplitude * fwhm * to_sigma, fwhm * to_sigma
    assert b1 == pytest.approx(certified.value["b1"], rel=1e-6)
    assert b2 == pytest.approx(certified.value["b2"], rel=1e-6)
    assert result.estimates["center"].value == pytest.approx(certified.value["b3"], rel=1e-6)
    slopes = np.array([0.0, b1 / fwhm, b1 / amplitude])
    b1_stderr = math.sqrt(slopes @ result.covariance.to_numpy() @ slopes)
    assert list(result.covariance.index) == ["center", "fwhm", "amplitude"]
    assert b1_stderr == pytest.approx(certified.stderr["b1"], rel=1e-4)
    assert result.estimates["fwhm"].stderr * to_sigma == pytest.approx(certified.stderr["b2"], rel=1e-4)
    assert result.estimates["center"].stderr == pytest.approx(certified.stderr["b3"], rel=1e-4)
    assert [warning.code for warning in result.warnings] == [
        "poor-fit"
    ]  # a measured line is no exact Gaussian


def test_the_full_recipe_on_eckerle4_covers_the_certificate_or_is_not_trusted() -> None:
    certified = read("Eckerle4")
    result = fit_curve(certified.x, certified.y, "gaussian", background="none")
    width = certified.value["b2"] * math.sqrt(8 * math.log(2))
    height = certified.value["b1"] / certified.value["b2"]
    for name, value in (("center", certified.value["b3"]), ("fwhm", width), ("amplitude", height)):
        low, high = result.estimates[name].interval(0.95)
        assert low < value < high or not result.trusted


@pytest.mark.parametrize("start", [0, 1], ids=["start 1", "start 2"])
@pytest.mark.parametrize("name", NAMES)
def test_models_of_ones_own_reach_the_certified_values(name: str, start: int) -> None:
    certified, function = problem(name)
    found = fit_curve(
        certified.x,
        certified.y,
        Model(function),
        start=certified.starts[start],
        weights="equal",
        robust=False,
    )
    assert digits({n: e.value for n, e in found.estimates.items()}, certified.value) >= 6
    assert "not-converged" not in [warning.code for warning in found.warnings]
    if name != "Lanczos1":  # its residuals are rounding, 1e-13 of y: no double can certify their size
        assert digits({n: e.stderr for n, e in found.estimates.items()}, certified.stderr) >= 4


@pytest.mark.parametrize("name", ["Misra1a", "BoxBOD", "Eckerle4", "MGH09", "Roszman1"])
def test_lmfit_models_reach_them_as_well(name: str) -> None:
    certified, function = problem(name)
    model = lmfit.Model(function)
    found = fit_curve(
        certified.x, certified.y, model, start=certified.starts[0], weights="equal", robust=False
    )
    assert digits({n: e.value for n, e in found.estimates.items()}, certified.value) >= 6
    assert digits({n: e.stderr for n, e in found.estimates.items()}, certified.stderr) >= 4


@pytest.mark.parametrize(
    ("model", "theirs", "width"),
    [("gaussian", "GaussianModel", math.sqrt(8 * math.log(2))), ("lorentzian", "LorentzianModel", 2.0)],
)
@pytest.mark.parametrize("background", ["none", "flat", "sloped"])
# lmfit's forward differences leave it up to 3e-4 of a stderr from the minimum.
def test_peak_agrees_with_lmfit(model: str, theirs: str, width: float, background: str) -> None:
    x, y = np.loadtxt(PEAK, unpack=True)
    peak = getattr(lmfit.models, theirs)()
    start = peak.guess(y, x=x)
    if background == "flat":
        peak = peak + lmfit.models.ConstantModel()
        start.update(peak.make_params(c=0.1, **{n: start[n].value for n in ("amplitude", "center", "sigma")}))
    elif background == "sloped":
        line = lmfit.models.LinearModel()
        peak = peak + line
        start.update(line.make_params(slope=0.0, intercept=0.1))
    wanted = peak.fit(y, start, x=x, fit_kws={"xtol": 1e-13, "ftol": 1e-13, "gtol": 1e-13})
    result = fit_curve(x, y, model, background=background, weights="equal", robust=False)
    for name, other, factor in (
        ("center", "center", 1.0),
        ("fwhm", "sigma", width),
        ("amplitude", "height", 1.0),
    ):
        assert result.estimates[name].value == pytest.approx(wanted.params[other].value * factor, rel=1e-5)
        assert result.estimates[name].stderr == pytest.approx(wanted.params[other].stderr * factor, rel=1e-3)
    if background == "flat":
        assert result.estimates["offset"].value == pytest.approx(wanted.params["c"].value, rel=1e-4)
        assert result.estimates["offset"].stderr == pytest.approx(wanted.params["c"].stderr, rel=1e-3)
    if background == "sloped":
        assert result.estimates["slope"].value == pytest.approx(wanted.params["slope"].value, rel=1e-3)
        assert result.estimates["slope"].stderr == pytest.approx(wanted.params["slope"].stderr, rel=1e-3)


@pytest.mark.parametrize("model", ["GaussianModel", "LorentzianModel"])
def test_peak_by_lmfit_models_themselves(model: str) -> None:
    x, y = np.loadtxt(PEAK, unpack=True)
    peak = getattr(lmfit.models, model)()
    wanted = peak.fit(y, peak.guess(y, x=x), x=x, fit_kws={"xtol": 1e-13, "ftol": 1e-13, "gtol": 1e-13})
    result = fit_curve(x, y, peak, weights="equal", robust=False)
    for name, estimate in result.estimates.items():
        assert estimate.value == pytest.approx(wanted.params[name].value, rel=1e-5)
        assert estimate.stderr == pytest.approx(wanted.params[name].stderr, rel=1e-3)
