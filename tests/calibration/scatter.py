"""How simulated scans scatter: shot to shot, in x, bad shots, wandering during the scan."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from tests.calibration.shapes import Array, Spec, Values, height


def draw_sigma(rng: np.random.Generator, spec: Spec, y: Array, values: Values, noise: str) -> Array:
    """Return the standard deviation of each point."""
    size = len(y)
    share = np.exp(rng.uniform(np.log(0.03), np.log(0.15), (size, 1)))
    tall = np.maximum(height(spec, values), 0.3)[:, None]
    floor = share * tall * np.exp(rng.uniform(np.log(0.1), np.log(0.6), (size, 1)))
    most = np.max(np.abs(y), axis=1, keepdims=True)
    grown = share * np.abs(y)
    if noise == "additive":
        return np.asarray(share * tall + np.zeros_like(y))
    if noise == "multiplicative":
        return np.asarray(np.maximum(grown, 1e-3 * most))
    if noise == "mixed":
        return np.asarray(np.hypot(grown, floor))
    return np.asarray(share * np.sqrt(np.maximum(np.abs(y), 1e-3 * most) * most))


def scatter_of_x(rng: np.random.Generator, spec: Spec, u: Array, values: Values) -> Array:
    """Return how far the true x lies from the one noted, (n,): 2-10 % of a width, half a period, a quarter scan."""
    share = rng.uniform(0.02, 0.10)
    unit = 0.25
    if spec.family == "line":
        unit = float(np.min(values["fwhm"]))
    if spec.family == "wave":
        unit = 0.5 / float(np.max(values["frequency"]))
    return np.asarray(share * unit * rng.normal(size=len(u)))


def scattered(
    rng: np.random.Generator, y: Array, sigma: Array, noise: str, kind: str, order: NDArray[np.intp]
) -> tuple[Array, NDArray[np.bool_]]:
    deviation = rng.normal(size=y.shape)
    if noise == "counts" and kind not in ("drift-ordered", "drift-shuffled") and bool(np.all(y >= 0)):
        rate = (y / sigma) ** 2
        deviation = (rng.poisson(np.maximum(rate, 1e-9)) - rate) / np.maximum(y / sigma, 1e-5)
    if kind.startswith("drift"):
        wander = np.empty_like(deviation)
        wander[:, order] = _wandering(rng, *y.shape)
        deviation = np.sqrt(0.5) * (deviation + wander)
    Y = y + sigma * deviation
    bad = np.zeros(y.shape, dtype=bool)
    if kind == "outliers":
        bad = _bad_shots(rng, y.shape, order)
        Y = np.where(bad, _thrown(rng, y, sigma), Y)
        bad &= np.abs(Y - y) > 4 * sigma
    return Y, bad


def _wandering(rng: np.random.Generator, size: int, n: int) -> Array:
    """Return walks that forget over a fifth to a half of the scan, mean 0 and variance 1, (size, n)."""
    keep = np.exp(-1.0 / (n * rng.uniform(0.2, 0.5, size)))
    walk = np.empty((size, n))
    walk[:, 0] = rng.normal(size=size)
    for turn in range(1, n):
        walk[:, turn] = keep * walk[:, turn - 1] + np.sqrt(1 - keep**2) * rng.normal(size=size)
    walk -= walk.mean(axis=1, keepdims=True)
    return np.asarray(walk / walk.std(axis=1, keepdims=True))


def _bad_shots(
    rng: np.random.Generator, shape: tuple[int, int], order: NDArray[np.intp]
) -> NDArray[np.bool_]:
    """Return which shots are bad: 1-4 % by chance; in every fourth scan of 30 and more, two or three in a row."""
    size, n = shape
    bad = rng.random(shape) < rng.uniform(0.01, 0.04, (size, 1))
    if n >= 30:
        for row in np.flatnonzero(rng.random(size) < 0.25):
            first = int(rng.integers(n - 3))
            bad[row] = False
            bad[row, order[first : first + int(rng.integers(2, 4))]] = True
    most = n // 10
    for row in np.flatnonzero(bad.sum(axis=1) > most):
        bad[row, rng.permutation(np.flatnonzero(bad[row]))[most:]] = False
    return bad


def _thrown(rng: np.random.Generator, y: Array, sigma: Array) -> Array:
    """Return what bad shots read: off either way, or nothing but camera noise."""
    sign = np.where(rng.random(y.shape) < 0.5, -1.0, 1.0)
    off = y + sign * sigma * np.exp(rng.uniform(np.log(6), np.log(40), y.shape))
    dropped = rng.random(y.shape) < 0.4
    return np.where(dropped, 0.01 * np.max(np.abs(y), axis=1, keepdims=True) * rng.normal(size=y.shape), off)
