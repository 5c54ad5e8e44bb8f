"""Where the points of a scan are, and in which order they are taken."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from tests.calibration.shapes import Array, Spec


def design(rng: np.random.Generator, spec: Spec, n: int) -> Array:
    """Return n sorted points of [0, 1]: even, jittered, random or dense somewhere, with repeats."""
    repeats = int(rng.integers(1, {16: 1, 30: 2}.get(n, min(5, n // 12)) + 1))
    distinct = n // repeats
    if repeats == 1 and rng.random() < 0.3:
        distinct = n - n // 5
    return np.sort(
        np.resize(_places(rng, spec, distinct), n)
        if n % distinct == 0
        else _some_twice(rng, spec, n, distinct)
    )


def _some_twice(rng: np.random.Generator, spec: Spec, n: int, distinct: int) -> Array:
    places = _places(rng, spec, distinct)
    return np.concatenate([places, rng.choice(places, n - distinct, replace=distinct < n - distinct)])


def _places(rng: np.random.Generator, spec: Spec, count: int) -> Array:
    even = np.linspace(0.0, 1.0, count)
    style = rng.random()
    if spec.name in ("landau-zener", "saturation"):
        even = np.linspace(0.02, 1.0, count)
        return even if style < 0.5 else np.geomspace(0.02, 1.0, count)
    if style < 0.5:
        return even
    if style < 0.75:
        return np.sort(np.clip(even + rng.uniform(-0.35, 0.35, count) / count, 0.0, 1.0))
    if spec.family == "wave" or style < 0.88:
        inner = np.sort(rng.random(count - 2))
        return np.concatenate([[0.0], 0.5 * even[1:-1] + 0.5 * inner, [1.0]])
    if spec.family == "line":
        bend = np.sinh(3.0 * (2 * even - 1)) / np.sinh(3.0)
        return np.asarray(0.5 + 0.5 * (0.7 * bend + 0.3 * (2 * even - 1)))
    return np.concatenate([[0.0], np.geomspace(0.02, 1.0, count - 1)])


def taking_order(rng: np.random.Generator, spec: Spec, n: int, kind: str) -> NDArray[np.intp]:
    """Return the point taken at each turn."""
    if kind == "drift-ordered" or (kind != "drift-shuffled" and rng.random() < 0.4):
        straight = np.arange(n)
        return straight if rng.random() < 0.7 else straight[::-1]
    return rng.permutation(n)
