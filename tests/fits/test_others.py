"""Estimates and intervals against lmfit and iminuit, which share nothing with the engine.

The profile intervals of lmfit (F test) and iminuit (MINOS, stated stderr) do not depend on the coordinate of a
parameter; ours are symmetric in the coordinate of the fit. On well-behaved sets they must agree.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.curve import fit_curve
from nightfold.fits.models import MODEL_NAMES
from nightfold.fits.result import FitResult

lmfit: Any = pytest.importorskip("lmfit")
iminuit: Any = pytest.importorskip("iminuit")
LeastSquares: Any = pytest.importorskip("iminuit.cost").LeastSquares

Array = NDArray[np.float64]
LEVELS = (0.6827, 0.95)
VALUE = 1e-4
"""Agreement of the estimates, in stderr."""
LIMIT = {0.6827: 0.01, 0.95: 0.02}
"""Agreement of the limits of an interval, in half its width."""


@dataclass(frozen=True)
class Case:
    """A curve as someone else would write it, with its own names, and data scattered about it."""

    model: str
    background: str
    names: tuple[str, ...]
    truth: tuple[float, ...]
    function: Callable[..., Array]
    x: Array
    scatter: float

    @property
    def y(self) -> Array:
        noise = np.random.default_rng(11).normal(size=len(self.x))
        return np.asarray(self.function(self.x, *self.truth) + self.scatter * noise)


def dip(x: Array, center: float, fwhm: float, amplitude: float, offset: float) -> Array:
    return offset + amplitude * (fwhm / 2) ** 2 / ((x - center) ** 2 + (fwhm / 2) ** 2)


def bell(x: Array, center: float, fwhm: float, amplitude: float) -> Array:
    return np.asarray(amplitude * 0.5 ** ((2 * (x - center) / fwhm) ** 2))


def decay(x: Array, lifetime: float, amplitude: float) -> Array:
    return np.asarray(amplitude * np.exp(-x / lifetime))


def pair_loss(x: Array, two_body_rate: float, amplitude: float) -> Array:
    return amplitude / (1 + two_body_rate * x)


def ringing(
    x: Array, frequency: float, decay_time: float, phase: float, amplitude: float, offset: float
) -> Array:
    wave = np.cos(2 * np.pi * frequency * x + phase)
    return np.asarray(offset + amplitude * np.exp(-x / decay_time) * wave)


FIELD, TIME = np.linspace(-6.0, 6.0, 60), np.linspace(0.0, 5.0, 60)
CASES = {
    case.model: case
    for case in (
        Case(
            "lorentzian",
            "flat",
            ("center", "fwhm", "amplitude", "offset"),
            (0.4, 2.5, -3.0, 5.0),
            dip,
            FIELD,
            0.06,
        ),
        Case("gaussian", "none", ("center", "fwhm", "amplitude"), (-0.7, 3.0, 2.0), bell, FIELD, 0.05),
        Case("exponential", "none", ("lifetime", "amplitude"), (2.0, 1.0), decay, TIME, 0.02),
        Case("two-body", "none", ("two_body_rate", "amplitude"), (0.8, 1.0), pair_loss, TIME, 0.02),
        Case(
            "damped-oscillation",
            "flat",
            ("frequency", "decay_time", "phase", "amplitude", "offset"),
            (1.3, 3.0, 0.6, 1.0, 0.5),
            ringing,
            TIME,
            0.04,
        ),
    )
}


@cache
def ours(model: str, stated: bool) -> FitResult:
    case = CASES[model]
    how: dict[str, Any] = {"weights": "equal"}
    if stated:
        how = {"weights": "given", "stderr": case.scatter, "absolute_stderr": True}
    return fit_curve(case.x, case.y, model, background=case.background, robust=False, **how)


@cache
def by_lmfit(model: str) -> Any:
    case = CASES[model]
    theirs = lmfit.Model(case.function)
    start = dict(zip(case.names, case.truth, strict=True))
    tight = {"xtol": 1e-13, "ftol": 1e-13, "gtol": 1e-13}
    return theirs.fit(case.y, x=case.x, fit_kws=tight, **start)


@cache
def by_iminuit(model: str) -> Any:
    case = CASES[model]
    cost = LeastSquares(case.x, case.y, case.scatter, case.function)
    minimum = iminuit.Minuit(cost, *case.truth)
    minimum.strategy, minimum.tol = 2, 1e-6
    minimum.migrad()
    assert minimum.valid
    return minimum


@pytest.mark.parametrize("model", CASES)
def test_lmfit_finds_the_same_estimates(model: str) -> None:
    found, theirs = ours(model, stated=False), by_lmfit(model)
    for name in CASES[model].names:
        mine, other = found.estimates[name], theirs.params[name]
        assert mine.value == pytest.approx(other.value, abs=VALUE * mine.stderr)
        assert mine.stderr == pytest.approx(other.stderr, rel=1e-3)


@pytest.mark.parametrize("model", CASES)
def test_iminuit_finds_the_same_estimates(model: str) -> None:
    found, theirs = ours(model, stated=True), by_iminuit(model)
    for name in CASES[model].names:
        mine = found.estimates[name]
        assert mine.value == pytest.approx(theirs.values[name], abs=10 * VALUE * mine.stderr)


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize("model", CASES)
def test_lmfit_finds_the_same_profile_intervals(model: str, level: float) -> None:
    found, theirs = ours(model, stated=False), by_lmfit(model)
    profile = theirs.conf_interval(sigmas=[level])
    for name in CASES[model].names:
        low, high = found.estimates[name].interval(level)
        half = (high - low) / 2
        assert low == pytest.approx(profile[name][0][1], abs=LIMIT[level] * half), name
        assert high == pytest.approx(profile[name][-1][1], abs=LIMIT[level] * half), name


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize("model", CASES)
def test_iminuit_finds_the_same_profile_intervals(model: str, level: float) -> None:
    found, theirs = ours(model, stated=True), by_iminuit(model)
    theirs.minos(cl=level)
    for name in CASES[model].names:
        low, high = found.estimates[name].interval(level)
        half, merror = (high - low) / 2, theirs.merrors[name]
        value = theirs.values[name]
        assert merror.is_valid
        assert low == pytest.approx(value + merror.lower, abs=LIMIT[level] * half), name
        assert high == pytest.approx(value + merror.upper, abs=LIMIT[level] * half), name


ROUND_TRIPS: dict[str, tuple[Array, dict[str, float]]] = {
    "lorentzian": (FIELD, {"center": 0.4, "fwhm": 2.0, "amplitude": -3.0, "offset": 5.0}),
    "gaussian": (FIELD, {"center": 0.4, "fwhm": 2.0, "amplitude": 3.0, "offset": 1.0}),
    "voigt": (FIELD, {"center": 0.4, "fwhm": 2.5, "amplitude": 3.0, "lorentzian_share": 0.5, "offset": 1.0}),
    "rabi-line": (FIELD, {"center": 0.4, "fwhm": 2.5, "amplitude": 0.9, "offset": 0.1}),
    "asymmetric-lorentzian": (
        FIELD,
        {"center": 0.4, "fwhm": 2.5, "amplitude": -3.0, "asymmetry": 0.3, "offset": 5.0},
    ),
    "exponential": (TIME, {"amplitude": 2.0, "lifetime": 2.0}),
    "two-body": (TIME, {"amplitude": 2.0, "two_body_rate": 0.8}),
    "three-body": (TIME, {"amplitude": 2.0, "three_body_rate": 0.8}),
    "one-two-body": (TIME, {"amplitude": 2.0, "one_body_rate": 0.3, "two_body_rate": 1.5}),
    "one-three-body": (TIME, {"amplitude": 2.0, "one_body_rate": 0.3, "three_body_rate": 2.0}),
    "damped-oscillation": (
        TIME,
        {"amplitude": 1.0, "frequency": 1.3, "decay_time": 3.0, "phase": 0.6, "offset": 0.5},
    ),
    "cosine": (TIME, {"amplitude": 1.0, "frequency": 1.3, "phase": 0.6, "offset": 0.5}),
    "ramsey": (TIME, {"amplitude": 1.0, "frequency": 1.3, "decay_time": 3.0, "phase": 0.6, "offset": 0.5}),
    "rabi-flop": (TIME, {"contrast": 0.9, "frequency": 1.3, "decay_time": 3.0, "offset": 0.05}),
    "expansion": (TIME, {"initial_size": 1.0, "velocity": 0.8}),
    "landau-zener": (TIME + 0.1, {"amplitude": 1.0, "characteristic_rate": 1.2, "offset": 0.1}),
    "saturation": (TIME, {"amplitude": 2.0, "saturation_point": 1.5}),
}


@pytest.mark.parametrize("model", MODEL_NAMES)
def test_to_lmfit_and_back(model: str) -> None:
    x, truth = ROUND_TRIPS[model]
    clean = fit_curve(x, np.ones_like(x), model, fixed=truth).predict(x)
    y = clean + 0.004 * np.random.default_rng(3).normal(size=len(x))
    found = fit_curve(x, y, model, weights="equal", robust=False)
    theirs, parameters = found.to_lmfit()
    assert theirs.eval(parameters, x=x) == pytest.approx(found.predict(x), rel=1e-9)
    again = theirs.fit(y, parameters, x=x, fit_kws={"xtol": 1e-13, "ftol": 1e-13, "gtol": 1e-13})
    start = {name: again.params[name].value for name in truth}
    back = fit_curve(x, y, theirs, start=start, weights="equal", robust=False)
    for name, value in truth.items():
        mine = found.estimates[name]
        assert mine.value == pytest.approx(value, abs=5 * mine.stderr), name
        assert again.params[name].value == pytest.approx(mine.value, abs=1e-3 * mine.stderr), name
        assert again.params[name].stderr == pytest.approx(mine.stderr, rel=1e-3), name
        assert back.estimates[name].value == pytest.approx(mine.value, abs=1e-4 * mine.stderr), name
        assert back.estimates[name].stderr == pytest.approx(mine.stderr, rel=1e-4), name
