"""A short calibration: truths are found, intervals cover, outliers and warnings are where they should be.

The whole of it is ``python tests/calibration/run.py``; the bounds here allow for the small number of scans.
"""

from __future__ import annotations

import numpy as np
import pytest

from ..calibration.check import pulls
from ..calibration.hopeless import hopeless_kinds
from ..calibration.scans import HOPELESS, make_batch, make_batches
from ..calibration.scoring import Score, score
from ..calibration.shapes import SPECS, total
from ..calibration.tables import Tally

SEED = 20_000
SETS = 10


@pytest.fixture(scope="module")
def scores() -> list[Score]:
    kinds = ("clean", "outliers", *HOPELESS)
    return [
        score(batch)
        for model, spec in SPECS.items()
        for kind in kinds
        if kind not in HOPELESS or kind in hopeless_kinds(spec)
        for batch in make_batches(model, 30, kind, SETS, SEED, rows=10)
    ]


def _of(scores: list[Score], *kinds: str) -> Tally:
    return Tally.of(s for s in scores if s.kind in kinds)


def test_nothing_is_refused(scores: list[Score]) -> None:
    assert [s.crash for s in scores if s.crash] == []


def test_truths_are_found(scores: list[Score]) -> None:
    clean, bad = _of(scores, "clean"), _of(scores, "outliers")
    assert clean.share(clean.success) > 97.5
    assert bad.share(bad.success) > 93


def test_intervals_cover(scores: list[Score]) -> None:
    low, high = _of(scores, "clean").coverage
    assert 63 < low < 74
    assert 92 < high < 98


def test_outliers_are_found_and_few_good_shots_flagged(scores: list[Score]) -> None:
    clean, bad = _of(scores, "clean"), _of(scores, "outliers")
    assert clean.share(clean.flagged) < 4
    assert bad.share(bad.found, bad.planted) > 75


def test_hopeless_scans_are_warned_of_and_good_ones_are_not(scores: list[Score]) -> None:
    assert _of(scores, *HOPELESS).warned > 96
    assert _of(scores, "clean").warned < 6


@pytest.mark.parametrize("model", SPECS)
def test_the_simulation_is_true_by_itself(model: str) -> None:
    """Without the library: the curve at the truth leaves residuals of variance 1, true weights cover."""
    batches = list(make_batches(model, 30, "clean", 40, SEED))
    away = [(b.Y - total(SPECS[model], b.background, b.x, b.truth)) / b.sigma for b in batches]
    assert 0.8 < np.mean(np.square(away)) < 1.2
    within = np.abs(np.concatenate([pulls(b, row) for b in batches for row in range(10)])) < 1
    assert 0.50 < within.mean() < 0.85


def test_the_same_seed_gives_the_same_scans() -> None:
    one, other = (make_batch("ramsey", 16, "outliers", 3) for _ in range(2))
    assert np.array_equal(one.Y, other.Y)
    assert not np.array_equal(one.Y, make_batch("ramsey", 16, "outliers", 4).Y)
