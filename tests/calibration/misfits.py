"""Scans whose real shape is not that of the model, with what is true of them all the same.

A centre is where the feature is highest (a doublet's, midway); a width, its full width at half height; an amplitude,
its height; a decay's amplitude, its value at x = 0; a frequency, that of the fundamental or of the stronger wave.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import erfcx
from tests.calibration.shapes import SPECS, Array, Spec, Values, total

Made = tuple[Array, Values, tuple[str, ...]]
LINE_NAMES = ("center", "fwhm", "amplitude")
FINE = 8001


def misfitted(rng: np.random.Generator, spec: Spec, background: str, u: Array, values: Values) -> Made:
    """Return curves (C, n), the values true of them, and of which names."""
    if spec.family == "line":
        return _line(rng, spec, background, u, values)
    if spec.family == "wave":
        return _wave(rng, spec, background, u, values)
    return _decay(rng, spec, background, u, values)


def _backed(spec: Spec, background: str, u: Array, values: Values, bare: Array) -> Array:
    """Return a bare curve with the background of the values."""
    y = bare
    if background != "none":
        y = y + values["offset"][:, None]
    if background == "sloped":
        origin = values["center"][:, None] if spec.family == "line" else 0.0
        y = y + values["slope"][:, None] * (u - origin)
    return y


# --- lines: shapes of z = (x - center) / width, not yet of height and width one ----------------------------


def _gaussian(z: Array, _: float) -> Array:
    return np.asarray(np.exp(-4 * np.log(2) * z * z))


def _lorentzian(z: Array, _: float) -> Array:
    return 1 / (1 + 4 * z * z)


def _doublet(z: Array, strength: float) -> Array:
    apart = 0.3 + 0.3 * strength
    return _lorentzian(z - apart, 0) + _lorentzian(z + apart, 0)


def _tail(z: Array, strength: float) -> Array:
    """A Gaussian with an exponential tail above."""
    s, t = 0.35, 0.3 + 0.9 * strength
    argument = (s / t - z / s) / np.sqrt(2)
    return np.asarray(np.exp(-0.5 * (z / s) ** 2) * erfcx(np.maximum(argument, -25)))


def _saturated(z: Array, strength: float) -> Array:
    return np.asarray(-np.expm1(-(1.5 + 3.5 * strength) / (1 + 4 * z * z)))


def _flat_top(z: Array, strength: float) -> Array:
    return np.asarray(np.exp(-np.log(2) * np.abs(2 * z) ** (4 + 4 * strength)))


LINES: dict[str, tuple[Callable[[Array, float], Array], ...]] = {
    "lorentzian": (_gaussian, _doublet, _tail, _saturated, _flat_top),
    "gaussian": (_lorentzian, _doublet, _tail, _saturated, _flat_top),
    "voigt": (_doublet, _tail, _flat_top),
    "rabi-line": (_lorentzian, _doublet, _tail, _saturated),
    "asymmetric-lorentzian": (_gaussian, _doublet, _tail, _saturated, _flat_top),
}


def _line(rng: np.random.Generator, spec: Spec, background: str, u: Array, values: Values) -> Made:
    shapes = LINES[spec.name]
    shape, strength = shapes[rng.integers(len(shapes))], float(rng.random())
    z = np.linspace(-8.0, 8.0, FINE)
    profile = shape(z, strength)
    high = np.flatnonzero(profile >= profile.max() / 2)
    peak = 0.0 if shape is _doublet else float(z[np.argmax(profile)])
    width = float(z[high[-1]] - z[high[0]])
    side = np.where(rng.random(len(values["center"])) < 0.5, -1.0, 1.0)[:, None]
    away = side * (u[None] - values["center"][:, None]) * width / values["fwhm"][:, None]
    bare = values["amplitude"][:, None] * shape(peak + away, strength) / profile.max()
    return _backed(spec, background, u, values, bare), values, LINE_NAMES


# --- decays: what is compared is the value at x = 0, at infinity ------------------------------------------


def _two_times(u: Array, rate: Array) -> Array:
    return np.asarray(0.6 * np.exp(-2.5 * rate * u) + 0.4 * np.exp(-0.3 * rate * u))


def _stretched(u: Array, rate: Array) -> Array:
    return np.asarray(np.exp(-((rate * u) ** 2)))


def _single(u: Array, rate: Array) -> Array:
    return np.asarray(np.exp(-rate * u))


def _pairs(u: Array, rate: Array) -> Array:
    return 1 / (1 + rate * u)


DECAYS: dict[str, tuple[Callable[[Array, Array], Array], ...]] = {
    "exponential": (_two_times, _stretched, _pairs),
    "two-body": (_single, _stretched),
    "three-body": (_single, _stretched, _pairs),
    "one-two-body": (_stretched,),
    "one-three-body": (_stretched,),
}
RATES = {
    "exponential": "lifetime",
    "two-body": "two_body_rate",
    "three-body": "three_body_rate",
    "one-two-body": "one_body_rate",
    "one-three-body": "one_body_rate",
}


def _decay(rng: np.random.Generator, spec: Spec, background: str, u: Array, values: Values) -> Made:
    if spec.name == "expansion":
        bare = values["initial_size"][:, None] + values["velocity"][:, None] * u
        return _backed(spec, background, u, values, bare), values, ("initial_size",)
    if spec.name == "landau-zener":
        r = values["characteristic_rate"][:, None]
        return (
            _backed(spec, background, u, values, values["amplitude"][:, None] * r / (u + r)),
            values,
            ("amplitude",),
        )
    if spec.name == "saturation":
        bare = -values["amplitude"][:, None] * np.expm1(-u / values["saturation_point"][:, None])
        return _backed(spec, background, u, values, bare), values, ("amplitude",)
    rate = values[RATES[spec.name]][:, None]
    rate = 1 / rate if spec.name == "exponential" else rate
    shapes = DECAYS[spec.name]
    bare = values["amplitude"][:, None] * shapes[rng.integers(len(shapes))](u[None], rate)
    return _backed(spec, background, u, values, bare), values, ("amplitude",)


# --- oscillations -----------------------------------------------------------------------------------------


def _wave(rng: np.random.Generator, spec: Spec, background: str, u: Array, values: Values) -> Made:
    """Two waves at once, a wave that is not a sine, or one that decays otherwise."""
    style = rng.integers(3)
    own = total(spec, "none", u, values)
    phase = 2 * np.pi * values["frequency"][:, None] * u
    if style == 0:
        apart = rng.uniform(0.6, 2.5, len(phase))[:, None]
        bare = own + 0.5 * np.cos(phase + 2 * np.pi * apart * u)
    elif style == 1:
        bare = own + 0.35 * np.cos(2 * phase + 1.0)
    else:
        other = SPECS["ramsey" if spec.name in ("damped-oscillation", "rabi-flop") else "damped-oscillation"]
        size = len(phase)
        stand_in = {
            "amplitude": values.get("amplitude", -values.get("contrast", np.zeros(size)) / 2),
            "frequency": values["frequency"],
            "phase": values.get("phase", np.zeros(size)),
            "decay_time": rng.uniform(0.25, 0.6, size),
        }
        bare = total(other, "none", u, stand_in) + values.get("contrast", np.zeros(size))[:, None] / 2
    return _backed(spec, background, u, values, bare), values, ("frequency",)
