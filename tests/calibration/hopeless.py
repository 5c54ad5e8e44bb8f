"""Scans from which no number can be had, by kind."""

from __future__ import annotations

import numpy as np
from tests.calibration.shapes import Array, Spec, Values

NOTHING = {
    "exponential": {"lifetime": 1e9},
    "two-body": {"two_body_rate": 1e-12},
    "three-body": {"three_body_rate": 1e-12},
    "one-two-body": {"one_body_rate": 1e-9, "two_body_rate": 1e-12},
    "one-three-body": {"one_body_rate": 1e-9, "three_body_rate": 1e-12},
    "expansion": {"initial_size": 1.0, "velocity": 0.0},
    "landau-zener": {"amplitude": 0.0, "offset": 1.0},
    "saturation": {"saturation_point": 1e-9},
    "rabi-flop": {"contrast": 0.0, "offset": 1.0},
}
"""Numbers with which a curve is a constant of one."""
SHORT = {
    "exponential": {"lifetime": (20.0, 100.0)},
    "two-body": {"two_body_rate": (0.01, 0.05)},
    "three-body": {"three_body_rate": (0.01, 0.05)},
    "one-two-body": {"one_body_rate": (0.005, 0.02), "two_body_rate": (0.005, 0.02)},
    "one-three-body": {"one_body_rate": (0.005, 0.02), "three_body_rate": (0.005, 0.02)},
    "landau-zener": {"characteristic_rate": (8.0, 30.0)},
    "saturation": {"saturation_point": (20.0, 100.0)},
    "rabi-flop": {"frequency": (0.05, 0.3)},
    "cosine": {"frequency": (0.05, 0.5)},
    "ramsey": {"frequency": (0.05, 0.5)},
    "damped-oscillation": {"frequency": (0.05, 0.5)},
}
"""From where to where the numbers lie when the scan ends too early."""


def hopeless_kinds(spec: Spec) -> tuple[str, ...]:
    """Return which kinds there are of a curve."""
    if spec.family == "line":
        return ("nothing", "outside", "narrow")
    return ("nothing", "short") if spec.name in SHORT else ("nothing",)


def spoiled(rng: np.random.Generator, spec: Spec, kind: str, u: Array, values: Values) -> Values:
    """Return values (C,) of scans that tell nothing."""
    size = len(values["offset"])
    if kind == "nothing":
        flat = {"amplitude": 0.0, "offset": 1.0} if spec.family in ("line", "wave") else {}
        changed = NOTHING.get(spec.name, flat)
        return {**values, "slope": np.zeros(size), **{n: np.full(size, v) for n, v in changed.items()}}
    if kind == "short":
        drawn = {
            name: np.exp(rng.uniform(np.log(low), np.log(high), size))
            for name, (low, high) in SHORT[spec.name].items()
        }
        return {**values, **drawn}
    if kind == "outside":
        away = values["fwhm"] * rng.uniform(0.5, 3.0, size)
        return {**values, "center": np.where(rng.random(size) < 0.5, -away, 1.0 + away)}
    places = np.unique(u)
    wide = np.flatnonzero(np.diff(places) >= 0.5 * np.median(np.diff(places)))
    left = rng.choice(wide, size)
    gap = np.diff(places)[left]
    center = places[left] + gap * rng.uniform(0.35, 0.65, size)
    return {**values, "center": center, "fwhm": gap * rng.uniform(0.04, 0.12, size)}
