"""The seventeen curves, written down independently of the library, and values a scan could have.

Everything is in *window units*: x runs over about [0, 1], y is of order one. ``Spec.units`` says how each number
turns into that of a scan with another origin and scale.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import voigt_profile

Array = NDArray[np.float64]
Values = dict[str, Array]

RABI_HALF = 0.7986853552847
"""u at which the Rabi line of a pi pulse has fallen to half."""


@dataclass(frozen=True)
class Spec:
    """A curve: its function of x (n,) and values (C, 1), and how its numbers count.

    ``units``: position, x, 1/x, y, rad or "" by name. ``links``: the coordinate in which a number is compared.
    ``limits``: the largest standard uncertainty, in that coordinate, at which a scan still *tells* the number: a
    position's in widths, a frequency's in 1/window, that of one of two rates in their sum (either may be zero).
    """

    name: str
    curve: Callable[[Array, Values], Array]
    draw: Callable[[np.random.Generator, int, float], Values]
    units: dict[str, str]
    links: dict[str, str]
    limits: dict[str, float]
    default: str = "flat"
    family: str = "decay"

    def links_of(self, name: str) -> str:
        return self.links.get(name, "linear")


def total(spec: Spec, background: str, x: Array, values: Values) -> Array:
    """Return the curve with its background, (C, n), for values (C,)."""
    column = {name: np.asarray(value, dtype=float)[:, None] for name, value in values.items()}
    y = spec.curve(x[None], column)
    if background != "none":
        y = y + column["offset"]
    if background == "sloped":
        origin = column["center"] if spec.family == "line" else 0.0
        y = y + column["slope"] * (x[None] - origin)
    return np.asarray(y + np.zeros_like(x)[None])


def _log(rng: np.random.Generator, low: float, high: float, size: int) -> Array:
    return np.asarray(np.exp(rng.uniform(np.log(low), np.log(high), size)))


# --- lines -------------------------------------------------------------------------------------------------


def _lorentzian(x: Array, v: Values) -> Array:
    return v["amplitude"] / (1 + 4 * ((x - v["center"]) / v["fwhm"]) ** 2)


def _gaussian(x: Array, v: Values) -> Array:
    return np.asarray(v["amplitude"] * 2.0 ** (-4 * ((x - v["center"]) / v["fwhm"]) ** 2))


def _voigt(x: Array, v: Values) -> Array:
    lorentz = v["lorentzian_share"] * v["fwhm"]
    rest = (1 - 0.5346 * v["lorentzian_share"]) ** 2 - 0.2166 * v["lorentzian_share"] ** 2
    gauss = v["fwhm"] * np.sqrt(np.maximum(rest, 1e-12))
    sigma, gamma = gauss / np.sqrt(8 * np.log(2)), lorentz / 2
    profile = voigt_profile(x - v["center"], sigma, gamma) / voigt_profile(0.0, sigma, gamma)
    return np.asarray(v["amplitude"] * profile)


def _rabi_line(x: Array, v: Values) -> Array:
    u = 2 * RABI_HALF * (x - v["center"]) / v["fwhm"]
    return np.asarray(v["amplitude"] * np.sin(np.pi / 2 * np.hypot(1, u)) ** 2 / (1 + u * u))


def _asymmetric(x: Array, v: Values) -> Array:
    away = x - v["center"]
    half = v["fwhm"] / 2 * np.where(away > 0, 1 + v["asymmetry"], 1 - v["asymmetry"])
    return np.asarray(v["amplitude"] / (1 + (away / half) ** 2))


def _draw_line(rng: np.random.Generator, size: int, spacing: float) -> Values:
    """Peaks on any offset and dips of any depth; every fifth centre near an edge."""
    edge = rng.random(size) < 0.2
    center = np.where(edge, np.where(rng.random(size) < 0.5, 0.05, 0.95), 0.5)
    center = center + np.where(edge, 0.05, 0.38) * rng.uniform(-1, 1, size)
    dip = rng.random(size) < 0.5
    depth = rng.uniform(0.3, 0.95, size)
    bare = np.where(rng.random(size) < 0.3, 0.02, 1.0) * rng.uniform(0, 2, size)
    return {
        "center": center,
        "fwhm": _log(rng, max(3.5 * spacing, 0.04), 0.6, size),
        "amplitude": np.where(dip, -depth, 1.0),
        "offset": np.where(dip, 1.0, bare),
        "slope": rng.uniform(-0.3, 0.3, size),
    }


def _draw_voigt(rng: np.random.Generator, size: int, spacing: float) -> Values:
    return {**_draw_line(rng, size, spacing), "lorentzian_share": rng.uniform(0.05, 0.95, size)}


def _draw_asymmetric(rng: np.random.Generator, size: int, spacing: float) -> Values:
    return {**_draw_line(rng, size, spacing), "asymmetry": rng.uniform(-0.6, 0.6, size)}


def _line(name: str, curve: Callable[[Array, Values], Array], extra: str = "", limit: float = 0) -> Spec:
    draw = {"lorentzian_share": _draw_voigt, "asymmetry": _draw_asymmetric}.get(extra, _draw_line)
    units = {"center": "position", "fwhm": "x", "amplitude": "y"} | ({extra: ""} if extra else {})
    limits = {"center": 0.2, "fwhm": 0.2} | ({extra: limit} if limit else {})
    return Spec(name, curve, draw, units, {"fwhm": "log"}, limits, "flat", "line")


# --- decays, growth ----------------------------------------------------------------------------------------


def _exponential(x: Array, v: Values) -> Array:
    return np.asarray(v["amplitude"] * np.exp(-x / v["lifetime"]))


def _two_body(x: Array, v: Values) -> Array:
    return v["amplitude"] / (1 + v["two_body_rate"] * x)


def _three_body(x: Array, v: Values) -> Array:
    return np.asarray(v["amplitude"] / np.sqrt(1 + 2 * v["three_body_rate"] * x))


def _one_two_body(x: Array, v: Values) -> Array:
    g, k = v["one_body_rate"], v["two_body_rate"]
    return np.asarray(v["amplitude"] * np.exp(-g * x) / (1 - k * np.expm1(-g * x) / g))


def _one_three_body(x: Array, v: Values) -> Array:
    g, k = v["one_body_rate"], v["three_body_rate"]
    return np.asarray(v["amplitude"] * np.exp(-g * x) / np.sqrt(1 - k * np.expm1(-2 * g * x) / g))


def _expansion(x: Array, v: Values) -> Array:
    return np.asarray(np.hypot(v["initial_size"], v["velocity"] * x))


def _landau_zener(x: Array, v: Values) -> Array:
    return np.asarray(-v["amplitude"] * np.expm1(-v["characteristic_rate"] / np.abs(x)))


def _saturation(x: Array, v: Values) -> Array:
    return v["amplitude"] * x / (x + v["saturation_point"])


def _draw_background(rng: np.random.Generator, size: int) -> Values:
    return {"offset": rng.uniform(0.0, 0.5, size), "slope": rng.uniform(-0.2, 0.2, size)}


def _draw_exponential(rng: np.random.Generator, size: int, _: float) -> Values:
    loading = rng.random(size) < 0.3
    more = _draw_background(rng, size)
    more["offset"] = np.where(loading, 1.0 + more["offset"], more["offset"])
    return {"amplitude": np.where(loading, -1.0, 1.0), "lifetime": _log(rng, 0.12, 1.0, size), **more}


def _draw_rate(name: str, low: float, high: float) -> Callable[[np.random.Generator, int, float], Values]:
    def draw(rng: np.random.Generator, size: int, _: float) -> Values:
        return {"amplitude": np.ones(size), name: _log(rng, low, high, size), **_draw_background(rng, size)}

    return draw


def _draw_mixed(name: str, low: float, high: float) -> Callable[[np.random.Generator, int, float], Values]:
    def draw(rng: np.random.Generator, size: int, _: float) -> Values:
        rates = {"one_body_rate": _log(rng, 0.4, 3.0, size), name: _log(rng, low, high, size)}
        return {"amplitude": np.ones(size), **rates, **_draw_background(rng, size)}

    return draw


def _draw_expansion(rng: np.random.Generator, size: int, _: float) -> Values:
    growth = _log(rng, 0.6, 12.0, size)
    first = 1 / np.hypot(1, growth)
    return {"initial_size": first, "velocity": growth * first, **_draw_background(rng, size)}


# --- oscillations ------------------------------------------------------------------------------------------


def _damped(x: Array, v: Values) -> Array:
    wave = np.cos(2 * np.pi * v["frequency"] * x + v["phase"])
    return np.asarray(v["amplitude"] * np.exp(-x / v["decay_time"]) * wave)


def _cosine(x: Array, v: Values) -> Array:
    return np.asarray(v["amplitude"] * np.cos(2 * np.pi * v["frequency"] * x + v["phase"]))


def _ramsey(x: Array, v: Values) -> Array:
    wave = np.cos(2 * np.pi * v["frequency"] * x + v["phase"])
    return np.asarray(v["amplitude"] * np.exp(-((x / v["decay_time"]) ** 2)) * wave)


def _rabi_flop(x: Array, v: Values) -> Array:
    swing = np.exp(-x / v["decay_time"]) * np.cos(2 * np.pi * v["frequency"] * x)
    return np.asarray(v["contrast"] / 2 * (1 - swing))


def _draw_wave(rng: np.random.Generator, size: int, spacing: float) -> Values:
    """One period up to 90 % of Nyquist's; every third about zero, the others positive."""
    most = max(0.45 / spacing, 2.0)
    near = rng.random(size) < 0.15
    return {
        "amplitude": np.ones(size),
        "frequency": np.where(near, rng.uniform(0.8, 1.0, size) * most, _log(rng, 1.3, most, size)),
        "phase": rng.uniform(-np.pi, np.pi, size),
        "decay_time": _log(rng, 0.3, 4.0, size),
        "offset": np.where(rng.random(size) < 0.35, 0.0, rng.uniform(1.1, 3.0, size)),
        "slope": rng.uniform(-0.3, 0.3, size),
    }


def _draw_flop(rng: np.random.Generator, size: int, spacing: float) -> Values:
    wave = _draw_wave(rng, size, spacing)
    return {
        "contrast": wave["amplitude"],
        "frequency": wave["frequency"],
        "decay_time": wave["decay_time"],
        "offset": rng.uniform(0.0, 0.3, size),
        "slope": wave["slope"] / 3,
    }


def _wave(name: str, curve: Callable[[Array, Values], Array], *names: str) -> Spec:
    kinds = {"amplitude": "y", "contrast": "y", "frequency": "1/x", "decay_time": "x", "phase": "rad"}
    draw = _draw_flop if name == "rabi-flop" else _draw_wave
    links = {"decay_time": "reciprocal", "phase": "circle"}
    return Spec(name, curve, draw, {n: kinds[n] for n in names}, links, {"frequency": 0.1}, "flat", "wave")


def _decay(
    name: str,
    curve: Callable[[Array, Values], Array],
    draw: Callable[[np.random.Generator, int, float], Values],
    limits: dict[str, float],
    default: str = "none",
    **units: str,
) -> Spec:
    links = dict.fromkeys(limits, "linear" if len(rates_of(units)) > 1 else "log")
    return Spec(name, curve, draw, units, links, limits, default)


def rates_of(names: Iterable[str]) -> list[str]:
    """Return which names are rates of a loss."""
    return [name for name in names if name.endswith("body_rate")]


RATE, SHARED = 0.16, 0.16
SPECS = {
    spec.name: spec
    for spec in (
        _line("lorentzian", _lorentzian),
        _line("gaussian", _gaussian),
        _line("voigt", _voigt, "lorentzian_share", 0.5),
        _line("rabi-line", _rabi_line),
        _line("asymmetric-lorentzian", _asymmetric, "asymmetry", 0.25),
        _decay(
            "exponential", _exponential, _draw_exponential, {"lifetime": RATE}, amplitude="y", lifetime="x"
        ),
        _decay(
            "two-body",
            _two_body,
            _draw_rate("two_body_rate", 0.8, 30.0),
            {"two_body_rate": RATE},
            amplitude="y",
            two_body_rate="1/x",
        ),
        _decay(
            "three-body",
            _three_body,
            _draw_rate("three_body_rate", 0.8, 60.0),
            {"three_body_rate": RATE},
            amplitude="y",
            three_body_rate="1/x",
        ),
        _decay(
            "one-two-body",
            _one_two_body,
            _draw_mixed("two_body_rate", 0.5, 20.0),
            {"one_body_rate": SHARED, "two_body_rate": SHARED},
            amplitude="y",
            one_body_rate="1/x",
            two_body_rate="1/x",
        ),
        _decay(
            "one-three-body",
            _one_three_body,
            _draw_mixed("three_body_rate", 0.5, 40.0),
            {"one_body_rate": SHARED, "three_body_rate": SHARED},
            amplitude="y",
            one_body_rate="1/x",
            three_body_rate="1/x",
        ),
        _wave("damped-oscillation", _damped, "amplitude", "frequency", "decay_time", "phase"),
        _wave("cosine", _cosine, "amplitude", "frequency", "phase"),
        _wave("ramsey", _ramsey, "amplitude", "frequency", "decay_time", "phase"),
        _wave("rabi-flop", _rabi_flop, "contrast", "frequency", "decay_time"),
        _decay(
            "expansion",
            _expansion,
            _draw_expansion,
            {"initial_size": 0.2, "velocity": 0.2},
            initial_size="y",
            velocity="y/x",
        ),
        _decay(
            "landau-zener",
            _landau_zener,
            _draw_rate("characteristic_rate", 0.05, 0.6),
            {"characteristic_rate": RATE},
            "flat",
            amplitude="y",
            characteristic_rate="x",
        ),
        _decay(
            "saturation",
            _saturation,
            _draw_rate("saturation_point", 0.05, 0.8),
            {"saturation_point": RATE},
            amplitude="y",
            saturation_point="x",
        ),
    )
}


def names_of(spec: Spec, background: str) -> list[str]:
    """Return the names reported of a curve on a background."""
    more = {"none": [], "flat": ["offset"], "sloped": ["offset", "slope"]}[background]
    return [*spec.units, *more]


def height(spec: Spec, values: Values) -> Array:
    """Return how large the feature is, (C,): what additive scatter is counted in."""
    for name in ("amplitude", "contrast"):
        if name in values:
            return np.abs(values[name])
    return np.ones_like(values["initial_size"])
