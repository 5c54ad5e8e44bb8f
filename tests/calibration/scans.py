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
from tests.calibration.designs import design, taking_order
from tests.calibration.knowing import bounds, burden, measure
from tests.calibration.scatter import draw_sigma, scatter_of_x, scattered
from tests.calibration.shapes import SPECS, Array, Spec, Values, names_of, rates_of, total

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
    u = design(rng, spec, n)
    noise = str(rng.choice(["additive", "multiplicative", "mixed", "counts"]))
    values, sigma = _truths(rng, spec, background, u, noise, kind, rows)
    y = total(spec, background, u, values)
    if kind == "misfit":
        y, values, told = misfitted(rng, spec, background, u, values)
        values = {name: values[name] for name in told}
    least = bounds(spec, background, u, values, sigma) if kind != "misfit" else {}
    order = taking_order(rng, spec, n, kind)
    if kind == "noisy-x":
        moved = u + scatter_of_x(rng, spec, u, values)
        y = total(spec, background, moved if spec.family == "line" else np.maximum(moved, 1e-3), values)
    Y, bad = scattered(rng, y, sigma, noise, kind, order)
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
    sigma = draw_sigma(rng, spec, total(spec, background, u, values), values, noise)
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
