"""Fit a batch with the library and compare with its truths.

A fit *succeeds* when every reported number lies within the larger of a loose tolerance (`TOLERANCE`) and five of the
least standard uncertainties anyone could have; what the fit says of its own uncertainty plays no part. Where a fit
fails, refuses or gives nan, its intervals miss. *Wrong* is a truth outside the fit's 99.73 % interval.
"""

from __future__ import annotations

import inspect
import time
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from tests.calibration.knowing import measure
from tests.calibration.scans import Batch
from tests.calibration.shapes import SPECS, Array, rates_of

from nightfold import fit_many
from nightfold.errors import NightfoldError

Bools = NDArray[np.bool_]
LEVELS = (0.6827, 0.95)
SURE = 0.9973
VISIBLE = 5.0
"""A wrong shape can be seen when even the nearest curve of the model is so many standard deviations off."""
TOLERANCE = {
    "fwhm": np.log(2),
    "lifetime": np.log(1.5),
    "two_body_rate": np.log(1.5),
    "three_body_rate": np.log(1.5),
    "one_body_rate": np.log(1.5),
    "initial_size": np.log(1.5),
    "velocity": np.log(1.5),
    "characteristic_rate": np.log(1.5),
    "saturation_point": np.log(1.5),
    "lorentzian_share": 0.5,
    "asymmetry": 0.5,
    "phase": 1.0,
}
"""In the coordinate of the name. A centre's is half a width, that of one of two rates half their sum, a frequency's
1/2 window, a damping's 1 window, an amplitude's or offset's half the feature, a slope's that over the window."""


@dataclass
class Score:
    """What became of a batch, one row a scan."""

    model: str
    background: str
    n: int
    kind: str
    noise: str
    success: Bools
    inside: dict[str, NDArray[np.bool_]]
    wrong: Bools
    trusted: Bools
    visible: Bools
    flagged: NDArray[np.intp]
    planted: int
    found: int
    codes: Counter[str] = field(default_factory=Counter)
    advice: Counter[str] = field(default_factory=Counter)
    cpu: float = 0.0
    crash: str = ""


def score(batch: Batch) -> Score:
    """Return how the library does on a batch."""
    began = time.process_time()
    size, names = len(batch), list(batch.truth)
    blank = np.zeros(size, dtype=bool)
    result = Score(
        batch.model,
        batch.background,
        batch.n,
        batch.kind,
        batch.noise,
        blank,
        {name: np.zeros((size, 2), dtype=bool) for name in names},
        ~blank,
        blank.copy(),
        blank.copy(),
        np.zeros(size, dtype=np.intp),
        int(batch.bad.sum()),
        0,
    )
    try:
        table = fit_many(
            batch.x, batch.Y, batch.model, full=True, background=batch.background, **_asked(batch)
        )
        _compare(batch, table, result)
    except (NightfoldError, ArithmeticError, LookupError, TypeError, ValueError) as error:
        result.crash = f"{batch.model} n={batch.n} {batch.kind} seed={batch.seed}: {error!r}"
    result.cpu = time.process_time() - began
    if batch.kind == "misfit":
        result.visible = _visible(batch)
    return result


def _visible(batch: Batch) -> Bools:
    """Return whether the model's nearest curve is far from the real one, by the scatter."""
    near = fit_many(
        batch.x,
        batch.curve,
        batch.model,
        background=batch.background,
        stderr=batch.sigma,
        weights="given",
        robust=False,
    )
    curves = np.array([near.result(row).predict(batch.x) for row in range(len(batch))])
    away = np.sqrt(np.sum(((curves - batch.curve) / batch.sigma) ** 2, axis=1))
    return np.asarray(~(away < VISIBLE))


def _asked(batch: Batch) -> dict[str, Any]:
    """Return what is handed over besides x, Y and the model."""
    options = dict(batch.options)
    if batch.stderr is not None:
        options["stderr"] = batch.stderr
    if "started" in inspect.signature(fit_many).parameters:
        options["started"] = batch.started
    return options


def _compare(batch: Batch, table: Any, result: Score) -> None:
    inside, miss = {}, np.zeros(len(batch), dtype=bool)
    good = np.ones(len(batch), dtype=bool)
    for name, truth in batch.truth.items():
        column = table.estimates[name]
        value = np.asarray(column.value)
        turn = np.zeros(len(batch))
        if batch.links[name] == "circle":
            turn = 2 * np.pi * np.round((value - truth) / (2 * np.pi))
        inside[name] = np.stack([_inside(column, level, truth + turn) for level in LEVELS], axis=1)
        miss |= ~_inside(column, SURE, truth + turn)
        away = np.abs(_coordinate(batch.links[name], value) - _coordinate(batch.links[name], truth + turn))
        good &= away <= np.maximum(_tolerance(batch, name), 5 * batch.least.get(name, np.zeros(len(batch))))
    result.inside, result.wrong, result.success = inside, miss, good
    result.trusted = np.asarray(table.trusted, dtype=bool)
    for warnings in table.warnings:
        result.codes.update({w.code for w in warnings if not w.advisory})
        result.advice.update({w.code for w in warnings if w.advisory})
    for row in range(len(batch)):
        out = np.zeros(batch.n, dtype=bool)
        out[list(table.result(row).outliers)] = True
        result.flagged[row] = np.count_nonzero(out & ~batch.bad[row])
        result.found += int(np.count_nonzero(out & batch.bad[row]))


def _inside(column: Any, level: float, truth: Array) -> Bools:
    low, high = column.interval(level)
    return np.asarray((low <= truth) & (truth <= high))


def _coordinate(link: str, value: Array) -> Array:
    with np.errstate(all="ignore"):
        if link == "log":
            return np.asarray(np.log(np.where(value > 0, value, np.nan)))
        return np.asarray(1 / value) if link == "reciprocal" else np.asarray(value)


def _tolerance(batch: Batch, name: str) -> Array | float:
    """Return how far off a number may be, in its coordinate."""
    window = float(np.ptp(batch.x))
    if name in ("center", *rates_of(batch.truth)) and batch.links[name] == "linear":
        return np.asarray(0.5 * measure(SPECS[batch.model], name, batch.truth))
    if name in TOLERANCE:
        return float(TOLERANCE[name])
    if name in ("frequency", "decay_time"):
        return (0.5 if name == "frequency" else 1.0) / window
    tall = batch.truth.get("amplitude", batch.truth.get("contrast", np.ptp(batch.Y, axis=1)))
    return np.asarray(0.5 * np.abs(tall) / (window if name == "slope" else 1.0), dtype=float)
