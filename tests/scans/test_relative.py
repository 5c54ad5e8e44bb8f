"""Readings relative to reference shots: the arithmetic, and whether its uncertainties are true."""

from __future__ import annotations

from math import hypot, inf, isnan, nan, sqrt
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.scans.relative import (
    Level,
    known_stderr,
    level_at,
    nearest,
    ratio_of,
    scatter_of,
    shared_errors,
)

Floats = NDArray[np.float64]


def at(*moments: float) -> Floats:
    return np.array(moments, dtype=np.float64)


def test_worked_by_hand() -> None:
    # References of 100(4) at 0 s and 140(2) at 400 s; a reading of 60(3) at 100 s.
    level = level_at(at(100), at(0, 400), at(100, 140), at(4, 2), 1800)
    assert level.value.tolist() == [110.0]  # 3/4 of 100 and 1/4 of 140
    assert level.stderr.tolist() == [pytest.approx(sqrt((0.75 * 4) ** 2 + (0.25 * 2) ** 2))]
    assert level.distance_s.tolist() == [100.0]
    ratio, stderr = ratio_of(at(60), at(3), level)
    assert ratio.tolist() == [pytest.approx(60 / 110)]
    assert stderr.tolist() == [pytest.approx(hypot(3 / 110, 60 * sqrt(9.25) / 110**2))]


def test_what_ratios_share_worked_by_hand() -> None:
    # The same, and a reading of 70 at 300 s and one of 99 before the first: references of 100(4) and 140(2).
    moments, times = at(100, 300, -50), at(0, 400)
    level = level_at(moments, times, at(100, 140), at(4, 2), 1800)
    ratio, stderr = ratio_of(at(60, 70, 99), at(0, 0, 0), level)
    errors = shared_errors(moments, times, at(4, 2), 1800, ratio, level.value)
    by_hand = [
        [-60 / 110**2 * 0.75 * 4, -60 / 110**2 * 0.25 * 2],
        [-70 / 130**2 * 0.25 * 4, -70 / 130**2 * 0.75 * 2],
        [-99 / 100**2 * 4, 0],
    ]
    assert errors == pytest.approx(np.array(by_hand))
    assert np.sqrt((errors**2).sum(axis=1)) == pytest.approx(stderr)  # no scatter of their own
    moved = 60 / (0.75 * 100.001 + 0.25 * 140) - 60 / 110
    assert moved == pytest.approx(errors[0, 0] * 0.001 / 4, rel=1e-4)
    assert shared_errors(moments, at(), at(), 1800, ratio, level.value).shape == (3, 0)
    assert known_stderr(times, at(100, 140), at(4, nan), 1800).tolist() == [
        4,
        pytest.approx(nan, nan_ok=True),
    ]


def test_at_the_ends_and_at_a_reference_shot_it_is_one_alone() -> None:
    level = level_at(at(-50, 0, 400, 450), at(0, 400), at(100, 140), at(4, 2), 1800)
    assert level.value.tolist() == [100, 100, 140, 140]
    assert level.stderr.tolist() == [4, 4, 2, 2]
    assert level.distance_s.tolist() == [50, 0, 0, 50]


def test_what_is_farther_than_the_limit_does_not_count() -> None:
    level = level_at(at(20, 60, 100, 200), at(0, 110), at(100, 210), at(1, nan), 50)
    assert level.value[:3].tolist() == [100, 210, 210]  # one of the two is near enough: it stands alone
    assert isnan(level.value[3])
    assert level.stderr[0] == 1
    assert np.isnan(level.stderr[1:]).all()  # not stated, and too few to tell
    assert level.distance_s.tolist() == [20, 50, 10, 90]
    nothing = level_at(at(1), at(), at(), at(), inf)
    assert isnan(nothing.value[0])
    assert nothing.distance_s[0] == inf


def test_the_larger_of_stated_and_seen() -> None:
    times, values = at(*range(0, 420, 60)), at(10, 12, 10, 12, 10, 12, 10)
    seen = 1.4826 * 2 / sqrt(1.5)  # every reading is 2 off the line through its neighbours
    assert scatter_of(times, values, 1800) == pytest.approx(seen)
    stated = at(0.1, 5, 0.1, nan, 0.1, 0.1, 0.1)
    assert level_at(times, times, values, stated, 1800).stderr.tolist() == [
        pytest.approx(5 if k == 1 else seen) for k in range(7)
    ]


def test_scatter_needs_five_reference_shots_that_are_near_each_other() -> None:
    times, values = at(*range(0, 300, 60)), at(10, 12, 10, 12, 10)
    assert scatter_of(times, values, 60) > 0
    assert isnan(scatter_of(times, values, 59))
    assert isnan(scatter_of(times[:4], values[:4], 60))
    assert isnan(scatter_of(np.zeros(5), values, 60))


def test_scatter_is_that_of_single_shots_whatever_the_drift_and_failures() -> None:
    rng = np.random.default_rng(5)
    times = np.sort(rng.uniform(0, 40_000, 2000))
    values = 1e5 + 2e4 * np.sin(times / 4000) + 3000 * rng.normal(size=2000)
    values[::100] = 1000  # failed
    assert scatter_of(times, values, 1800) == pytest.approx(3000, rel=0.12)


def test_nearest() -> None:
    assert nearest(at(-1, 4, 7, 99), at(0, 10)).tolist() == [1, 4, 3, 89]
    assert nearest(at(1), at()).tolist() == [inf]


def drifting(rng: np.random.Generator, every: int, stated: float) -> dict[str, Any]:
    """Return the pulls of a scan on a machine that loses a third in two hours and wanders, beside reference shots.

    Shots scatter by 3 %; reference shots by 4 %, of which `stated` is the stated uncertainty.
    """
    times = np.arange(400) * 20.0
    machine = 1e5 * (1 - 0.3 * times / times[-1] + 0.05 * np.sin(times / 1500 + rng.uniform(0, 6)))
    is_reference = np.arange(400) % every == 0
    truth = rng.uniform(0.3, 1.0, 400)
    shots, references = ~is_reference, is_reference
    noise = 0.03 * truth * machine
    readings = truth * machine + noise * rng.normal(size=400)
    seen = machine * (1 + 0.04 * rng.normal(size=400))
    level = level_at(times[shots], times[references], seen[references], stated * seen[references], 1800)
    ratio, stderr = ratio_of(readings[shots], noise[shots], level)
    plain = readings[shots] / 1e5 - truth[shots]
    return {"pulls": (ratio - truth[shots]) / stderr, "raw": plain, "off": ratio - truth[shots]}


@pytest.mark.parametrize(("every", "stated"), [(10, 0.01), (10, 0.04), (20, 0.01), (40, 0.01)])
def test_uncertainties_cover(every: int, stated: float) -> None:
    runs = [drifting(np.random.default_rng(seed), every, stated) for seed in range(300)]
    pulls = np.concatenate([run["pulls"] for run in runs])
    off, raw = (np.concatenate([run[name] for run in runs]) for name in ("off", "raw"))
    width, inside68, inside95 = pulls.std(), (abs(pulls) < 1).mean(), (abs(pulls) < 1.96).mean()
    print(
        f"{every=} {stated=}: mean {pulls.mean():.3f} width {width:.3f} 68 {inside68:.3f} 95 {inside95:.3f} "
        f"rms {off.std():.4f} raw {raw.std():.4f}"
    )
    assert abs(pulls.mean()) < 0.1
    assert 0.85 < width < 1.1
    assert 0.66 < inside68 < 0.78
    assert 0.93 < inside95 < 0.98


def test_without_a_known_reference_uncertainty_there_is_none() -> None:
    ratio, stderr = ratio_of(
        at(1, 1, 1), at(0.1, nan, 0.1), Level(at(2, 2, 2), at(0.2, 0.2, nan), at(0, 0, 0))
    )
    assert ratio.tolist() == [0.5, 0.5, 0.5]
    assert np.isfinite(stderr).tolist() == [True, False, False]
