"""Awkward scans of every model: huge offsets, any scale, uneven grids, repeats, lines at the edge, few periods."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nightfold.fits.curve_function import evaluate
from nightfold.fits.engine.layout import Layout
from nightfold.fits.models import find_model
from nightfold.fits.models.shape import Background

Array = NDArray[np.float64]
PLACES = ((0.0, 1.0), (384.2304844685e12, 60e6), (832.1, 0.2), (-4e-9, 3e-12), (1e12, 5e11), (5.0, 1.0))
"""Middle and length of scans over a line."""
SCALES = (1.0, 1e-9, 3e5, 2e9, 0.04)
HEIGHTS = (1.0, 1e6, -1e-7, 3e-3, -40.0)
LINES = ("lorentzian", "gaussian", "voigt", "rabi-line", "asymmetric-lorentzian")
WAVES = ("damped-oscillation", "cosine", "ramsey", "rabi-flop")


@dataclass(frozen=True)
class Scans:
    """Noisy scans (B, n) of one curve over x (n,)."""

    model: str
    background: Background
    x: Array
    Y: Array
    truth: dict[str, float]

    @property
    def curve(self) -> Array:
        """The curve without noise."""
        return evaluate(Layout(find_model(self.model), self.background, frozenset()), self.x, self.truth)


def places(rng: np.random.Generator, model: str) -> Array:
    """Return where points lie, from about 0 to 1: even, uneven or random, with repeats."""
    n = int(rng.integers(20, 60))
    style = rng.integers(4)
    if style == 0:
        u = np.linspace(0.0, 1.0, n)
    elif style == 1:
        u = np.sort(rng.random(n))
    elif style == 2:
        u = np.repeat(np.linspace(0.0, 1.0, max(n // 2, 14)), 2)
    elif model in LINES or model in WAVES:
        u = np.linspace(0.0, 1.0, n) + rng.uniform(-0.3, 0.3, n) / n
    else:
        u = np.geomspace(0.01, 1.0, n)
    return np.asarray(u)


def draw(rng: np.random.Generator, model: str, u: Array) -> dict[str, float]:
    """Return parameters for x from 0 to 1 and a height of one."""
    distinct = len(np.unique(u.round(12)))
    uniform = rng.uniform
    if model in LINES:
        width = float(np.exp(uniform(np.log(max(4.0 / distinct, 0.08)), np.log(0.4))))
        edge = rng.random() < 0.25
        values = {"center": float(uniform(0.02, 0.1) if edge else uniform(0.15, 0.85)), "fwhm": width}
        if edge:
            values["fwhm"] = max(width, 0.15)
        if model == "asymmetric-lorentzian":  # both sides must show
            values["center"] = float(np.clip(values["center"], width, 1 - width))
            values["fwhm"] = width
        values["amplitude"] = 1.0
        values |= {"voigt": {"lorentzian_share": uniform(0.0, 1.0)}}.get(model, {})
        values |= {"asymmetric-lorentzian": {"asymmetry": uniform(-0.6, 0.6)}}.get(model, {})
        return values
    if model in WAVES:
        nyquist = 0.5 * (distinct - 1)
        near = rng.random() < 0.25
        f = uniform(0.8, 0.95) * nyquist if near else np.exp(uniform(np.log(1.5), np.log(0.6 * nyquist)))
        decay = float("inf") if rng.random() < 0.2 else float(np.exp(uniform(np.log(0.4), np.log(3.0))))
        phase = float(uniform(-np.pi, np.pi))
        return {
            "cosine": {"amplitude": 1.0, "frequency": f, "phase": phase},
            "rabi-flop": {"contrast": 1.0, "frequency": f, "decay_time": decay},
        }.get(model, {"amplitude": 1.0, "frequency": f, "decay_time": decay, "phase": phase})
    fast = float(np.exp(uniform(np.log(0.8), np.log(8.0))))
    slow = float(np.exp(uniform(np.log(0.3), np.log(3.0))))
    return {
        "exponential": {"amplitude": 1.0, "lifetime": 1.0 / fast},
        "two-body": {"amplitude": 1.0, "two_body_rate": 2 * fast},
        "three-body": {"amplitude": 1.0, "three_body_rate": 3 * fast},
        "one-two-body": {"amplitude": 1.0, "one_body_rate": slow, "two_body_rate": 2 * fast},
        "one-three-body": {"amplitude": 1.0, "one_body_rate": slow, "three_body_rate": 3 * fast},
        "expansion": {"initial_size": 1.0, "velocity": 2 * slow},
        "landau-zener": {"amplitude": 1.0, "characteristic_rate": 0.3 * slow},
        "saturation": {"amplitude": 1.0, "saturation_point": 0.4 * slow},
    }[model]


def make_scans(model: str, seed: int, size: int = 20) -> Scans:
    """Return noisy scans of one curve on one grid, in some units."""
    rng = np.random.default_rng([seed, *model.encode()])
    shape = find_model(model)
    u = places(rng, model)
    values = draw(rng, model, u)
    start, scale = 0.0, float(rng.choice(SCALES))
    if model in LINES:
        middle, scale = PLACES[rng.integers(len(PLACES))]
        start = middle - scale / 2
    height = abs(float(rng.choice(HEIGHTS))) if model == "expansion" else float(rng.choice(HEIGHTS))
    if model in ("damped-oscillation", "cosine", "ramsey"):
        height = abs(height)
    background: Background = shape.default_background
    powers = {parameter.name: parameter.unit for parameter in shape.parameters}
    factor = {"x": scale, "y": height, "1/x": 1 / scale, "y/x": height / scale, "": 1.0, "rad": 1.0}
    truth = {name: float(value) * factor[powers[name]] for name, value in values.items()}
    if "center" in truth:
        truth["center"] += start
    if background != "none":
        truth["offset"] = 0.8 * height
    x = start + scale * u
    curve = evaluate(Layout(shape, background, frozenset()), x, truth)
    noise = float(rng.uniform(0.02, 0.08)) * abs(height)
    if model == "voigt" or "-three-" in model or "-two-" in model:
        noise /= 2
    Y = curve + noise * rng.normal(size=(size, len(x)))
    return Scans(model, background, x, Y, truth)
