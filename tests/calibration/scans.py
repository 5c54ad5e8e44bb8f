"""Simulated scans as awkward as real ones, with their truths; the library is not used.

A `Batch` holds scans that share x, model and kind. ``make_batch(model, n, kind, seed)`` is reproducible. Seeds 0 to 999
are for tuning; whatever is reported uses seeds from `REPORTED` on.

Kinds
-----
clean           the scatter is additive, multiplicative, both, or that of counts; the model is right
outliers        as clean, and 1-4 % of the shots lie 6-40 standard deviations off, or drop to nothing, or two
                or three in a row are bad
stderr-right, stderr-relative, stderr-scale, stderr-shape
                with stated uncertainties: right and taken at face value; right but for a factor; a factor of
                3 off and taken at face value; the same for all shots, of the picture alone
drift-ordered, drift-shuffled
                half the variance wanders during the scan, taken in order or shuffled
noisy-x         x scatters too
misfit          the shape is not that of the model (see misfits.py)
nothing         no feature at all
outside         the centre lies outside the scan; a decay is over before the scan begins
short           under one period; all of the scan before the decay
narrow          the line falls between the points
"""

from __future__ import annotations

import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from tests.calibration.knowing import bounds, burden, measure
from tests.calibration.shapes import SPECS, Array, Spec, Values, height, names_of, rates_of, total

DEVELOPMENT, REPORTED = 0, 10_000
SIZES = (16, 30, 60)
ROWS = 20
TRIES = 40
AS_ASSUMED = ("clean", "outliers", "stderr-right", "stderr-relative")
STATED = ("stderr-right", "stderr-relative", "stderr-scale", "stderr-shape")
AWKWARD = ("stderr-scale", "stderr-shape", "drift-ordered", "drift-shuffled", "noisy-x", "misfit")
HOPELESS = ("nothing", "outside", "short", "narrow")
KINDS = ("clean", "outliers", *STATED[:2], *AWKWARD, *HOPELESS)
CADENCE = 30.0
BEGAN = 1.75e9

ORIGINS = ((0.0, 1.0), (31.0, 5.0), (832.0, 0.2), (384.23e6, 60.0), (-4.0, 8.0), (2e-6, 1e-9), (1e9, 4e6))
TIMES = (1.0, 40.0, 8e3, 2e-6, 3e-9, 1e5)
HEIGHTS = (1.0, 1.0, 3e5, 2e-15, 4e11, 0.01)


@dataclass(frozen=True)
class Case:
    """One scan and its truth."""

    x: Array
    y: Array
    stderr: Array | None
    started: Array | None
    model: str
    background: str
    options: dict[str, Any]
    truth: dict[str, float]
    kind: str
    identifiable: bool


@dataclass(frozen=True)
class Batch:
    """Scans that share x.

    ``truth`` and ``least`` (B,) each by reported name: the value, and the least standard uncertainty an
    unbiased estimate could have, in the coordinate ``links`` names. ``sigma``, ``bad`` (B, n): scatter, and
    which points are outliers. ``curve`` (B, n): what Y would be without scatter. ``options``: what a lab would
    tell the fit besides (x, Y, model, background).
    """

    model: str
    background: str
    kind: str
    seed: int
    x: Array
    Y: Array
    curve: Array
    sigma: Array
    truth: Values
    least: Values
    links: dict[str, str]
    stderr: Array | None = None
    started: Array | None = None
    bad: NDArray[np.bool_] = field(default_factory=lambda: np.zeros((0, 0), dtype=bool))
    options: dict[str, Any] = field(default_factory=dict)
    noise: str = ""

    @property
    def n(self) -> int:
        return len(self.x)

    @property
    def identifiable(self) -> bool:
        return self.kind not in HOPELESS

    @property
    def as_assumed(self) -> bool:
        """Whether the model is right and the scatter is one the intervals are meant for."""
        return self.kind in AS_ASSUMED

    def __len__(self) -> int:
        return len(self.Y)

    def case(self, row: int) -> Case:
        stderr = None if self.stderr is None else self.stderr[row]
        truth = {name: float(column[row]) for name, column in self.truth.items()}
        return Case(
            self.x,
            self.Y[row],
            stderr,
            self.started,
            self.model,
            self.background,
            self.options,
            truth,
            self.kind,
            self.identifiable,
        )


def make_batches(
    model: str, n: int, kind: str, sets: int, seed: int = DEVELOPMENT, rows: int = ROWS
) -> Iterator[Batch]:
    """Yield batches of up to `rows` scans, `sets` in all, each with its own x."""
    for first in range(0, sets, rows):
        yield make_batch(model, n, kind, seed + first // rows, min(rows, sets - first))


def make_batch(model: str, n: int, kind: str, seed: int, rows: int = ROWS) -> Batch:
    """Return one batch of `rows` scans of `n` points."""
    from tests.calibration.misfits import misfitted

    spec = SPECS[model]
    rng = np.random.default_rng([seed, n, zlib.crc32(model.encode()), zlib.crc32(kind.encode())])
    background = _background(rng, spec, kind)
    u = _design(rng, spec, n)
    noise = str(rng.choice(["additive", "multiplicative", "mixed", "counts"]))
    values, sigma = _truths(rng, spec, background, u, noise, kind, rows)
    y = total(spec, background, u, values)
    if kind == "misfit":
        y, values, told = misfitted(rng, spec, background, u, values)
        values = {name: values[name] for name in told}
    least = bounds(spec, background, u, values, sigma) if kind != "misfit" else {}
    order = _order(rng, spec, n, kind)
    if kind == "noisy-x":
        moved = u + _x_scatter(rng, spec, u, values)
        y = total(spec, background, moved if spec.family == "line" else np.maximum(moved, 1e-3), values)
    Y, bad = _scatter(rng, y, sigma, noise, kind, order)
    truth = {n: values[n] for n in (names_of(spec, background) if kind != "misfit" else values)}
    bare = Batch(
        model, background, kind, seed, u, Y, y, sigma, truth, least, {n: spec.links_of(n) for n in truth}
    )
    return _dressed(rng, spec, bare, bad, order, noise)


def _background(rng: np.random.Generator, spec: Spec, kind: str) -> str:
    """Return the default background mostly, another now and then; a slope under a Landau-Zener curve is ambiguous."""
    other = {"none": ("flat", "flat"), "flat": ("sloped", "none" if spec.family == "line" else "sloped")}
    common = 0.65 if spec.default == "none" else 0.8
    if len(rates_of(spec.units)) > 1:
        common = 0.9
    if rng.random() < common or kind in HOPELESS or spec.name == "landau-zener":
        return spec.default
    return str(rng.choice(other[spec.default]))


# --- where the points are ----------------------------------------------------------------------------------


def _design(rng: np.random.Generator, spec: Spec, n: int) -> Array:
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


def _order(rng: np.random.Generator, spec: Spec, n: int, kind: str) -> NDArray[np.intp]:
    """Return the point taken at each turn."""
    if kind == "drift-ordered" or (kind != "drift-shuffled" and rng.random() < 0.4):
        straight = np.arange(n)
        return straight if rng.random() < 0.7 else straight[::-1]
    return rng.permutation(n)


# --- what is true ------------------------------------------------------------------------------------------


def _truths(
    rng: np.random.Generator, spec: Spec, background: str, u: Array, noise: str, kind: str, rows: int
) -> tuple[Values, Array]:
    """Return values (rows,) and scatter (rows, n) of scans that are identifiable, or hopeless, as the kind has it."""
    count = TRIES * rows
    values = spec.draw(rng, count, 1.0 / (len(np.unique(u)) - 1))
    if background == "none":
        values = _without_background(spec, values)
    if kind in HOPELESS:
        from tests.calibration.hopeless import spoiled

        values = spoiled(rng, spec, kind, u, values)
    sigma = _sigma(rng, spec, total(spec, background, u, values), values, noise)
    if kind in HOPELESS:
        chosen = _untold(spec, background, u, values, sigma, rows) if kind == "short" else np.arange(rows)
        return {name: column[chosen] for name, column in values.items()}, sigma[chosen]
    heavy = burden(spec, background, u, values, sigma)
    good = np.flatnonzero(heavy <= 1.0)[:rows]
    if len(good) < rows:
        spare = np.setdiff1d(np.argsort(heavy, kind="stable"), good, assume_unique=False)
        spare = spare[np.argsort(heavy[spare], kind="stable")][: rows - len(good)]
        sigma[spare] /= 1.25 * heavy[spare, None]
        good = np.sort(np.concatenate([good, spare]))
    return {name: column[good] for name, column in values.items()}, sigma[good]


def _untold(
    spec: Spec, background: str, u: Array, values: Values, sigma: Array, rows: int
) -> NDArray[np.intp]:
    """Return rows whose rates or times nobody could tell to a factor of e; oscillations are all short."""
    if spec.family == "wave":
        return np.arange(rows)
    least = bounds(spec, background, u, values, sigma)
    spread = np.max([least[name] / measure(spec, name, values) for name in spec.limits], axis=0)
    return np.concatenate([np.flatnonzero(spread >= 1.0), np.argsort(-spread)])[:rows]


def _without_background(spec: Spec, values: Values) -> Values:
    """Return values of lines and decays that are positive and end at zero."""
    flip = np.abs(values["amplitude"]) if "amplitude" in values else None
    return values if flip is None else {**values, "amplitude": flip}


def _sigma(rng: np.random.Generator, spec: Spec, y: Array, values: Values, noise: str) -> Array:
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


# --- what is measured --------------------------------------------------------------------------------------


def _x_scatter(rng: np.random.Generator, spec: Spec, u: Array, values: Values) -> Array:
    """Return how far the true x lies from the one noted, (n,): 2-10 % of a width, half a period, a quarter scan."""
    share = rng.uniform(0.02, 0.10)
    unit = 0.25
    if spec.family == "line":
        unit = float(np.min(values["fwhm"]))
    if spec.family == "wave":
        unit = 0.5 / float(np.max(values["frequency"]))
    return np.asarray(share * unit * rng.normal(size=len(u)))


def _scatter(
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


# --- as a lab would have it --------------------------------------------------------------------------------


def _dressed(
    rng: np.random.Generator,
    spec: Spec,
    bare: Batch,
    bad: NDArray[np.bool_],
    order: NDArray[np.intp],
    noise: str,
) -> Batch:
    """Return the batch in units of a lab, in the order taken, with times and stated uncertainties."""
    line = spec.family == "line"
    x0, xs = ORIGINS[rng.integers(len(ORIGINS))] if line else (0.0, TIMES[rng.integers(len(TIMES))])
    ys = float(HEIGHTS[rng.integers(len(HEIGHTS))])
    stated = _stated(rng, bare, bare.sigma) if bare.kind in STATED else None
    shift = {"position": x0}
    factors = {"position": xs, "x": xs, "1/x": 1 / xs, "y": ys, "y/x": ys / xs}
    units = {**spec.units, "offset": "y", "slope": "y/x"}
    truth, least = {}, {}
    for name, value in bare.truth.items():
        factor = factors.get(units[name], 1.0)
        truth[name] = shift.get(units[name], 0.0) + factor * value
        scale = {"linear": factor, "reciprocal": 1 / factor}.get(bare.links[name], 1.0)
        if name in bare.least:
            least[name] = bare.least[name] * scale
    return Batch(
        bare.model,
        bare.background,
        bare.kind,
        bare.seed,
        x0 + xs * bare.x[order],
        ys * bare.Y[:, order],
        ys * bare.curve[:, order],
        ys * bare.sigma[:, order],
        truth,
        least,
        bare.links,
        None if stated is None else ys * stated[:, order],
        BEGAN + CADENCE * np.arange(bare.n, dtype=np.float64),
        bad[:, order],
        {"absolute_stderr": True} if bare.kind in ("stderr-right", "stderr-scale") else {},
        noise,
    )


def _stated(rng: np.random.Generator, bare: Batch, sigma: Array) -> Array:
    """Return the uncertainties noted with the shots."""
    if bare.kind == "stderr-right":
        return sigma
    if bare.kind == "stderr-relative":
        return sigma * np.exp(rng.uniform(-5, 5, (len(sigma), 1)))
    if bare.kind == "stderr-scale":
        return sigma * np.where(rng.random((len(sigma), 1)) < 0.5, 1 / 3, 3.0)
    return np.asarray(0.3 * np.median(sigma, axis=1, keepdims=True) + np.zeros_like(sigma))
