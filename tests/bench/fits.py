"""Time of fits against lmfit (guess and fit) and scipy's curve_fit, in the same process.

Run ``python tests/bench/fits.py [repeats] [model …]``. Every figure is processor time, the best of several tries
taken in turns, so that a busy machine disturbs all alike. The floors are looped over the same data: curve_fit from a
start that a careful person would give, lmfit from its own guess where it has one, and otherwise from that start.
``equal`` is ordinary least squares, ``one`` the full recipe with its warnings; of 1000 fits in one call, ``default``
is what `fit_many` does unasked, ``full`` the full recipe with the warnings.
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
from scipy.special import wofz

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many

Array = NDArray[np.float64]
SETS, FLOOR_SETS = 1000, 25


@dataclass(frozen=True)
class Case:
    """A model with data; `start` in the function's order; `ready` is lmfit's own model with a guess."""

    model: str
    x: Array
    function: Callable[..., Array]
    truth: tuple[float, ...]
    scatter: float
    ready: str = ""

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


def voigt(x: Array, center: float, sigma: float, gamma: float, amplitude: float, offset: float) -> Array:
    return np.asarray(amplitude * wofz((x - center + 1j * gamma) / (sigma * math.sqrt(2))).real + offset)


def rabi_line(x: Array, center: float, half: float, amplitude: float, offset: float) -> Array:
    v = 1 + ((x - center) / half) ** 2
    return np.asarray(amplitude * np.sin(np.pi / 2 * np.sqrt(v)) ** 2 / v + offset)


def skewed(x: Array, center: float, fwhm: float, amplitude: float, asymmetry: float, offset: float) -> Array:
    half = fwhm / 2 * (1 + asymmetry * np.sign(x - center))
    return np.asarray(amplitude / (1 + ((x - center) / half) ** 2) + offset)


def exponential(x: Array, amplitude: float, lifetime: float) -> Array:
    return np.asarray(amplitude * np.exp(-x / lifetime))


def two_body(x: Array, amplitude: float, rate: float) -> Array:
    return amplitude / (1 + rate * x)


def three_body(x: Array, amplitude: float, rate: float) -> Array:
    return np.asarray(amplitude / np.sqrt(1 + 2 * rate * x))


def one_two_body(x: Array, amplitude: float, one: float, two: float) -> Array:
    left = np.exp(-one * x)
    return np.asarray(amplitude * left / (1 + two * (1 - left) / one))


def one_three_body(x: Array, amplitude: float, one: float, three: float) -> Array:
    left = np.exp(-one * x)
    return np.asarray(amplitude * left / np.sqrt(1 + three * (1 - left**2) / one))


def oscillation(
    x: Array, amplitude: float, frequency: float, decay: float, phase: float, offset: float
) -> Array:
    return np.asarray(amplitude * np.exp(-x / decay) * np.cos(2 * np.pi * frequency * x + phase) + offset)


def cosine(x: Array, amplitude: float, frequency: float, phase: float, offset: float) -> Array:
    return np.asarray(amplitude * np.cos(2 * np.pi * frequency * x + phase) + offset)


def ramsey(x: Array, amplitude: float, frequency: float, decay: float, phase: float, offset: float) -> Array:
    wave = np.cos(2 * np.pi * frequency * x + phase)
    return np.asarray(amplitude * np.exp(-((x / decay) ** 2)) * wave + offset)


def rabi_flop(x: Array, contrast: float, frequency: float, decay: float, offset: float) -> Array:
    return np.asarray(contrast / 2 * (1 - np.exp(-x / decay) * np.cos(2 * np.pi * frequency * x)) + offset)


def expansion(x: Array, size: float, velocity: float) -> Array:
    return np.asarray(np.sqrt(size**2 + (velocity * x) ** 2))


def landau_zener(x: Array, amplitude: float, rate: float, offset: float) -> Array:
    return np.asarray(amplitude * (1 - np.exp(-rate / x)) + offset)


def saturation(x: Array, amplitude: float, point: float) -> Array:
    return amplitude * x / (x + point)


FIELD, TIME = np.linspace(-5.0, 5.0, 30), np.linspace(0.0, 1.0, 30)
CASES = (
    Case("lorentzian", FIELD, lorentzian, (0.3, 2.0, 1.0, 5.0), 0.08, "LorentzianModel"),
    Case("gaussian", FIELD, gaussian, (0.3, 2.0, 1.0, 5.0), 0.08, "GaussianModel"),
    Case("voigt", FIELD, voigt, (0.3, 0.6, 0.6, 1.5, 5.0), 0.04, "VoigtModel"),
    Case("rabi-line", FIELD, rabi_line, (0.3, 1.5, 1.0, 5.0), 0.08),
    Case("asymmetric-lorentzian", FIELD, skewed, (0.3, 2.0, 1.0, 0.3, 5.0), 0.05, "SplitLorentzianModel"),
    Case("exponential", TIME, exponential, (1.0, 0.4), 0.05, "ExponentialModel"),
    Case("two-body", TIME, two_body, (1.0, 4.0), 0.05),
    Case("three-body", TIME, three_body, (1.0, 4.0), 0.05),
    Case("one-two-body", TIME, one_two_body, (1.0, 1.5, 4.0), 0.02),
    Case("one-three-body", TIME, one_three_body, (1.0, 1.5, 8.0), 0.02),
    Case("damped-oscillation", TIME, oscillation, (0.8, 5.0, 0.6, 0.7, 1.0), 0.08),
    Case("cosine", TIME, cosine, (0.8, 5.0, 0.7, 1.0), 0.08, "SineModel"),
    Case("ramsey", TIME, ramsey, (0.8, 5.0, 0.6, 0.7, 1.0), 0.08),
    Case("rabi-flop", TIME, rabi_flop, (0.9, 5.0, 0.6, 0.05), 0.05),
    Case("expansion", TIME, expansion, (1.0, 2.0), 0.05),
    Case("landau-zener", TIME + 0.05, landau_zener, (0.9, 0.2, 0.05), 0.03),
    Case("saturation", TIME, saturation, (1.0, 0.3), 0.03),
)


def lmfit_once(case: Case, y: Array) -> Any:
    """Guess where lmfit has a guess, otherwise start nearby; then fit."""
    if case.model == "exponential":
        model = lmfit.models.ExponentialModel()
        return model.fit(y, model.guess(y, x=case.x), x=case.x)
    if case.ready:
        peak = getattr(lmfit.models, case.ready)()
        model = peak + lmfit.models.ConstantModel()
        floor = float(np.mean(y) if case.ready == "SineModel" else np.min(y))
        parameters = peak.guess(y - floor, x=case.x)
        parameters.add("c", value=floor)
        return model.fit(y, parameters, x=case.x)
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
        "equal": (
            lambda: [fit_curve(x, y, case.model, weights="equal", robust=False) for y in few],
            FLOOR_SETS,
        ),
        "one": (lambda: [fit_curve(x, y, case.model) for y in few], FLOOR_SETS),
        "default": (lambda: fit_many(x, Y, case.model), SETS),
        "full": (lambda: fit_many(x, Y, case.model, full=True).warnings, SETS),
    }
    best = dict.fromkeys(ways, math.inf)
    for _ in range(repeats):
        for name, (action, fits) in ways.items():
            best[name] = min(best[name], seconds(action) / fits)
    return best


RATIOS = (
    ("equal", "lmfit"),
    ("one", "lmfit"),
    ("one", "curve_fit"),
    ("curve_fit", "default"),
    ("lmfit", "default"),
    ("curve_fit", "full"),
    ("lmfit", "full"),
)


def main() -> None:
    arguments = sys.argv[1:]
    repeats = int(arguments.pop(0)) if arguments and arguments[0].isdigit() else 3
    cases = [case for case in CASES if not arguments or case.model in arguments]
    names = ("curve_fit", "lmfit", "equal", "one", "default", "full")
    print(f"30 points; best of {repeats}; milliseconds a fit, then ratios (* lmfit guesses its start)")
    print(f"{'':22}" + "one fit".center(40) + "1000 in one call".center(20))
    upper = "".join(f"{a:>10}" for a, _ in RATIOS)
    print(
        f"{'':22}{'curve_fit':>10}{'lmfit':>10}{'equal':>10}{'one':>10}{'default':>10}{'full':>10} |{upper}"
    )
    print(f"{'':82} |" + "".join(f"{'/' + b:>10}" for _, b in RATIOS))
    for case in cases:
        best = measure(case, repeats)
        label = case.model + ("*" if case.ready else "")
        times = "".join(f"{best[n] * 1e3:10.3f}" for n in names)
        ratios = "".join(f"{best[a] / best[b]:10.2f}" for a, b in RATIOS)
        print(f"{label:22}{times} |{ratios}", flush=True)


if __name__ == "__main__":
    main()
