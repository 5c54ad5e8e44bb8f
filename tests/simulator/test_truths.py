"""Truths of heron: what is stated can be got back from the records, by SciPy's curve_fit alone."""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime
from functools import cache
from math import log
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import curve_fit

from nightfold.simulator.evening import Night, run_nights
from nightfold.simulator.schedule import EDITS
from nightfold.simulator.truth import Mishap, Truth
from nightfold.simulator.writing import SEED

Array = NDArray[np.float64]


def lorentzian(x: Array, center: float, fwhm: float, amplitude: float, offset: float) -> Array:
    return amplitude / (1 + (2 * (x - center) / fwhm) ** 2) + offset


def gaussian(x: Array, center: float, fwhm: float, amplitude: float, offset: float) -> Array:
    return amplitude * np.exp(-4 * log(2) * ((x - center) / fwhm) ** 2) + offset


def exponential(x: Array, lifetime: float, amplitude: float) -> Array:
    return amplitude * np.exp(-x / lifetime)


def three_body(x: Array, three_body_rate: float, amplitude: float) -> Array:
    return amplitude / np.sqrt(1 + 2 * three_body_rate * x)


def oscillation(
    x: Array, frequency: float, decay_time: float, amplitude: float, phase: float, offset: float
) -> Array:
    return amplitude * np.exp(-x / decay_time) * np.cos(2 * np.pi * frequency * x + phase) + offset


MODELS: dict[str, tuple[Callable[..., Array], Callable[[Truth, Array], list[float]]]] = {
    "lorentzian": (lorentzian, lambda truth, y: [_center(truth), _width(truth), *_heights(truth, y)]),
    "gaussian": (
        gaussian,
        lambda truth, y: _gaussian_start(truth, y),
    ),
    "exponential": (exponential, lambda truth, y: [truth.value * 1.3, float(y.max())]),
    "three-body": (three_body, lambda truth, y: [truth.value * 1.3, float(y.max())]),
    "damped-oscillation": (oscillation, lambda truth, y: [truth.value, 100.0, 30.0, -1.0, float(y.mean())]),
}


def _gaussian_start(truth: Truth, y: Array) -> list[float]:
    if truth.along == "detuning":
        return [13.4 + truth.value / 1e3, 0.06, float(np.ptp(y)), float(y.min())]
    return [truth.value, 1.0, float(y.max()), 0.0]


def _center(truth: Truth) -> float:
    return truth.value if truth.parameter == "center" else 61.3


def _width(truth: Truth) -> float:
    return 6.0 if truth.unit == "MHz" else 0.8


def _heights(truth: Truth, y: Array) -> list[float]:
    peak = truth.unit == "MHz"
    return [float(np.ptp(y)) * (1 if peak else -1), float(y.min() if peak else y.max())]


@cache
def campaign(seed: int) -> tuple[Night, ...]:
    return tuple(run_nights(seed, 30, None))


def in_card_units(stated: Any) -> float:
    if not isinstance(stated, dict):
        return float(stated)
    return float(stated["value"]) * (1e3 if stated["unit"] == "s" else 1)


def points(nights: tuple[Night, ...], truth: Truth, mishap: Mishap | None = None) -> tuple[Array, Array]:
    """Return x and y of the good shots of the scan that a truth is about, put right where there was a mishap."""
    scans = mishap.scans if mishap else (truth.scan,)
    labels = {scan.split("#")[0] if "#" in scan else None for scan in scans}
    factor = mishap.factor if mishap else 1
    axis = truth.along if truth.along in truth.swept else truth.swept[0]
    line = reference_line(nights, truth) if truth.relative_to else np.ones(1)
    found = []
    for taken in (shot for night in nights for shot in night.shots):
        record = taken.record
        if taken.outlier or "failed" in record or record.get("reference") or record.get("scan") not in labels:
            continue
        settings = record["parameters"]
        same_slice = all(in_card_units(settings[name]) == value for name, value in truth.where.items())
        started = datetime.fromisoformat(record["started"])
        sequence = record["sequence"]
        name = sequence["name"] if isinstance(sequence, dict) else sequence
        if name == truth.sequence and truth.first <= started <= truth.last and same_slice:
            seen = record["observables"] | (taken.again["observables"] if taken.again else {})
            expected = float(np.polyval(line, (started - truth.first).total_seconds()))
            found.append((in_card_units(settings[axis]) / factor, read(seen, truth.observable) / expected))
    x, y = np.array(found, dtype=float).T
    return x, y


def read(seen: dict[str, Any], observable: str) -> float:
    """Return an observable, with what the card computes of the two clouds computed here."""
    if observable == "polarisation":
        up, down = seen["atom_number[up]"]["value"], seen["atom_number[down]"]["value"]
        return float((up - down) / (up + down))
    return float(seen[observable]["value"])


def reference_line(nights: tuple[Night, ...], truth: Truth) -> NDArray[np.float64]:
    """Return the straight line through the reference shots of a scan, against seconds from its first shot."""
    good = [
        ((datetime.fromisoformat(shot.record["started"]) - truth.first).total_seconds(), shot.record)
        for night in nights
        for shot in night.shots
        if shot.record.get("reference") and "failed" not in shot.record and not shot.outlier
    ]
    span = (truth.last - truth.first).total_seconds()
    near = [
        (after, record["observables"][truth.observable]["value"])
        for after, record in good
        if -60 < after < span + 60
    ]
    after_s, values = np.array(near, dtype=float).T
    line: NDArray[np.float64] = np.polyfit(after_s, values, 1)
    return line


def pull(nights: tuple[Night, ...], truth: Truth, mishap: Mishap | None = None) -> float:
    """Return how many standard uncertainties the fitted value is off, weighted as the machine scatters."""
    x, y = points(nights, truth, mishap)
    function, start = MODELS[truth.model]
    values = np.array(start(truth, y))
    for _ in range(3):
        curve = function(x, *values)
        if truth.observable == "atom_number":
            scatter = np.hypot(0.0435 * curve, 450 if truth.relative_to is None else 0.004)
        else:
            scatter = np.full_like(x, 0.005 if truth.observable == "polarisation" else 1.7)
        values, covariance = curve_fit(function, x, y, p0=values, sigma=scatter)
    place = function.__code__.co_varnames.index(truth.parameter) - 1
    scale, zero = (1e3, 13.4) if truth.along == "detuning" else (1, 0)
    return float(((values[place] - zero) * scale - truth.value) / np.sqrt(covariance[place, place]) / scale)


@pytest.mark.parametrize("seed", [SEED, 1, 2, 3])
def test_truths_come_back(seed: int) -> None:
    nights = campaign(seed)
    pulls = [pull(nights, truth) for night in nights for truth in night.truths]
    assert len(pulls) == 14
    assert max(abs(value) for value in pulls) < 5
    assert float(np.sqrt(np.mean(np.square(pulls)))) < 1.5


@pytest.mark.parametrize("seed", [SEED, 1, 2, 3])
def test_truths_come_back_once_mishaps_are_put_right(seed: int) -> None:
    nights = campaign(seed)
    pulls = {
        (mishap.kind, truth.parameter): pull(nights, truth, mishap)
        for night in nights
        for mishap in night.mishaps
        for truth in mishap.truths
    }
    assert len(pulls) == 9
    assert max(abs(value) for value in pulls.values()) < 4, pulls
    assert float(np.sqrt(np.mean(np.square(list(pulls.values()))))) < 1.6


def test_mishaps_matter() -> None:
    nights = campaign(SEED)
    wrong = {mishap.kind: mishap for night in nights for mishap in night.mishaps}
    assert wrong["misrecorded"].factor == pytest.approx(100 / 120)
    dense = [
        shot
        for night in nights
        for shot in night.shots
        if shot.again and not shot.outlier and shot.record["parameters"]["hold_time"] == 0
    ]
    first = np.mean([shot.record["observables"]["atom_number"]["value"] for shot in dense])
    later = np.mean([shot.again["observables"]["atom_number"]["value"] for shot in dense if shot.again])
    assert later / first == pytest.approx(1.53, abs=0.06)


def test_truths_are_told_apart_and_lie_inside_their_scans() -> None:
    nights = campaign(SEED)
    truths = [truth for night in nights for truth in night.truths]
    assert len({truth.what for truth in truths}) == len(truths)
    assert {truth.model for truth in truths} == set(MODELS)
    for truth in truths:
        x, _ = points(nights, truth)
        assert 12 <= len(x) <= 90
        assert truth.first < truth.last
        if truth.parameter == "center":
            assert x.min() < truth.value < x.max()
        assert (truth.along is None) == (len(truth.swept) == 1)


def test_a_scan_taken_up_again_keeps_its_round() -> None:
    truth = next(
        truth for night in campaign(SEED) for truth in night.truths if truth.scan.startswith("loss-fine")
    )
    assert truth.scan == "loss-fine#2"
    assert truth.first.date() < truth.last.date()


def test_edits_are_in_the_records() -> None:
    nights = campaign(SEED)
    edits = [edit for night in nights for edit in night.edits]
    assert [edit.parameter for edit in edits] == [edit.parameter for edit in EDITS]
    for edit in edits:
        before: list[Any] = []
        after: list[Any] = []
        for taken in (shot for night in nights for shot in night.shots):
            record = taken.record
            if edit.parameter in record.get("swept", ()) or (
                not record.get("reference") and "scan" not in record
            ):
                continue
            stated = record["parameters"][edit.parameter]
            value = stated["value"] if isinstance(stated, dict) else stated
            (before if datetime.fromisoformat(record["started"]) < edit.at else after).append(value)
        assert set(before) == {edit.old}
        assert set(after) == {edit.new}
        assert edit.at.isoformat(timespec="milliseconds") in {
            taken.record["started"] for night in nights for taken in night.shots
        }


def test_the_step_shows_in_the_reference_shots() -> None:
    nights = campaign(SEED)
    changes = [change for night in nights for change in night.changes]
    assert [(change.observable, change.kind, change.size) for change in changes] == [
        ("atom_number", "step", -0.14),
        ("optical_depth", "step", -0.14),
    ]
    step = changes[0]
    assert (step.cause, step.old, step.new) == ("repump_power", 62, 51)
    before: list[float] = []
    after: list[float] = []
    for taken in (shot for night in nights for shot in night.shots if not shot.outlier):
        if taken.record.get("reference") and "failed" not in taken.record:
            started = datetime.fromisoformat(taken.record["started"])
            (before if started < step.at else after).append(
                taken.record["observables"]["atom_number"]["value"]
            )
    assert np.mean(after) / np.mean(before) - 1 == pytest.approx(step.size, abs=0.02)
