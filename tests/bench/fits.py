"""Time of fits against lmfit (guess and fit) and scipy's curve_fit, in the same process.

Run ``python tests/bench/fits.py [repeats]``. Prints for every model the time of one fit and of a thousand in
one call as ratios to those floors, which are looped over the same data from a start a careful person would
give (curve_fit) or from lmfit's own guess where it has one. Every figure is processor time, the best of several tries
taken in turns, so that a busy machine disturbs all alike.
"""

from __future__ import annotations

import math
import os
import sys
from collections.abc import Callable
from dataclasses import dataclass
from time import process_time
from typing import Any

os.environ.setdefault("OMP_NUM_THREADS", "1")

import lmfit
import numpy as np
from numpy.typing import NDArray
from scipy.optimize import curve_fit

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many

Array = NDArray[np.float64]
SETS, FLOOR_SETS = 1000, 25


@dataclass(frozen=True)
class Case:
    """A model with data; `start` in the function's order; `guess` fits once by lmfit."""

    model: str
    x: Array
    function: Callable[..., Array]
    truth: tuple[float, ...]
    scatter: float

    @property
    def data(self) -> Array:
        noise = np.random.default_rng(1).normal(size=(SETS, len(self.x)))
        return np.asarray(self.function(self.x, *self.truth) + self.scatter * noise)

    @property
    def start(self) -> list[float]:
        return [value * 1.15 for value in self.truth]


def lorentzian(x: Array, center: float, fwhm: float, amplitude: float, offset: float) -> Array:
    return amplitude / (1 + (2 * (x - center) / fwhm) ** 2) + offset


def gaussian(x: Array, center: float, fwhm: float, amplitude: float, offset: float) -> Array:
    return np.asarray(amplitude * np.exp(-4 * math.log(2) * ((x - center) / fwhm) ** 2) + offset)


def exponential(x: Array, amplitude: float, lifetime: float) -> Array:
    return np.asarray(amplitude * np.exp(-x / lifetime))


def two_body(x: Array, amplitude: float, rate: float) -> Array:
    return amplitude / (1 + rate * x)


def three_body(x: Array, amplitude: float, rate: float) -> Array:
    return np.asarray(amplitude / np.sqrt(1 + 2 * rate * x))


def oscillation(
    x: Array, amplitude: float, frequency: float, decay: float, phase: float, offset: float
) -> Array:
    return np.asarray(amplitude * np.exp(-x / decay) * np.cos(2 * np.pi * frequency * x + phase) + offset)


FIELD, TIME = np.linspace(-5.0, 5.0, 30), np.linspace(0.0, 1.0, 30)
CASES = (
    Case("lorentzian", FIELD, lorentzian, (0.3, 2.0, 1.0, 5.0), 0.08),
    Case("gaussian", FIELD, gaussian, (0.3, 2.0, 1.0, 5.0), 0.08),
    Case("exponential", TIME, exponential, (1.0, 0.4), 0.05),
    Case("two-body", TIME, two_body, (1.0, 4.0), 0.05),
    Case("three-body", TIME, three_body, (1.0, 4.0), 0.05),
    Case("damped-oscillation", TIME, oscillation, (0.8, 5.0, 0.6, 0.7, 1.0), 0.08),
)


def lmfit_once(case: Case, y: Array) -> Any:
    """Guess where lmfit has a guess, otherwise start nearby; then fit."""
    if case.model in ("lorentzian", "gaussian"):
        peak = lmfit.models.LorentzianModel() if case.model == "lorentzian" else lmfit.models.GaussianModel()
        model = peak + lmfit.models.ConstantModel()
        floor = float(np.min(y))
        parameters = peak.guess(y - floor, x=case.x)
        parameters.add("c", value=floor)
        return model.fit(y, parameters, x=case.x)
    if case.model == "exponential":
        model = lmfit.models.ExponentialModel()
        return model.fit(y, model.guess(y, x=case.x), x=case.x)
    model = lmfit.Model(case.function)
    names = model.param_names
    return model.fit(y, model.make_params(**dict(zip(names, case.start, strict=True))), x=case.x)


def seconds(action: Callable[[], object]) -> float:
    began = process_time()
    action()
    return process_time() - began


def measure(case: Case, repeats: int) -> dict[str, float]:
    """Return seconds a fit for each way of doing it."""
    Y, x, few = case.data, case.x, case.data[:FLOOR_SETS]
    ways: dict[str, tuple[Callable[[], object], int]] = {
        "curve_fit": (lambda: [curve_fit(case.function, x, y, p0=case.start) for y in few], FLOOR_SETS),
        "lmfit": (lambda: [lmfit_once(case, y) for y in few], FLOOR_SETS),
        "one": (lambda: [fit_curve(x, y, case.model) for y in few], FLOOR_SETS),
        "many": (lambda: fit_many(x, Y, case.model), SETS),
        "full": (lambda: fit_many(x, Y, case.model, full=True), SETS),
    }
    best = dict.fromkeys(ways, math.inf)
    for _ in range(repeats):
        for name, (action, fits) in ways.items():
            best[name] = min(best[name], seconds(action) / fits)
    return best


def main() -> None:
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    print(f"30 points; best of {repeats}; milliseconds a fit, and ratios")
    print(f"{'model':20}{'curve_fit':>10}{'lmfit':>8}{'one':>8}{'1000':>8}{'full':>8}", end="")
    print(f"{'one/lmfit':>11}{'curve_fit/1000':>16}{'lmfit/1000':>12}{'lmfit/full':>12}")
    for case in CASES:
        best = measure(case, repeats)
        print(f"{case.model:20}" + f"{best['curve_fit'] * 1e3:10.2f}{best['lmfit'] * 1e3:8.2f}", end="")
        print("".join(f"{best[way] * 1e3:8.3f}" for way in ("one", "many", "full")), end="")
        print(f"{best['one'] / best['lmfit']:11.2f}{best['curve_fit'] / best['many']:16.1f}", end="")
        print(f"{best['lmfit'] / best['many']:12.0f}{best['lmfit'] / best['full']:12.1f}")


if __name__ == "__main__":
    main()
