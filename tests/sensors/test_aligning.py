"""Readings at shots, against a loop that looks at every one, and against pandas."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold.sensors.aligning import ends_of_shots, mean_over, nearest, typical_interval

TIMES = st.lists(st.integers(-50, 50), max_size=30, unique=True).map(sorted)
NUMBERS = st.one_of(st.floats(-1e3, 1e3), st.just(math.nan), st.just(math.inf))


def ints(values: list[int]) -> np.ndarray:
    return np.array(values, np.int64)


@given(TIMES, st.lists(st.integers(-80, 80), max_size=20), st.integers(0, 40))
def test_nearest_by_looking_at_each(times: list[int], moments: list[int], limit: int) -> None:
    found = nearest(ints(times), np.arange(float(len(times))), ints(moments), limit)
    for moment, value in zip(moments, found, strict=True):
        distances = [abs(moment - at) for at in times]
        if not times or min(distances) > limit:
            assert math.isnan(value)
        else:
            assert value == distances.index(min(distances))  # the first of two equally near is the earlier


def test_nearest_as_pandas_has_it() -> None:
    rng = np.random.default_rng(3)
    at = np.unique(rng.integers(0, 10**9, 5000)) * 2
    moments = np.sort(rng.integers(0, 10**9, 3000) * 2 + 1)
    values = rng.normal(size=len(at))
    limit = 150_000
    frame = pd.merge_asof(
        pd.DataFrame({"at": moments}),
        pd.DataFrame({"at": at, "value": values}),
        on="at",
        direction="nearest",
        tolerance=limit,
    )
    found = nearest(at, values, moments, limit)
    assert 0 < np.isnan(found).sum() < len(found)
    halfway = np.isin(moments * 2, at[1:] + at[:-1])
    np.testing.assert_array_equal(found[~halfway], frame["value"].to_numpy()[~halfway])


@given(TIMES, st.lists(st.tuples(st.integers(-60, 60), st.integers(0, 30)), max_size=20), st.data())
def test_mean_by_looking_at_each(times: list[int], spans: list[tuple[int, int]], data: st.DataObject) -> None:
    values = data.draw(st.lists(NUMBERS, min_size=len(times), max_size=len(times)))
    starts, ends = [start for start, _ in spans], [start + length for start, length in spans]
    found = mean_over(ints(times), np.array(values), ints(starts), ints(ends))
    for start, end, mean in zip(starts, ends, found, strict=True):
        own = [v for at, v in zip(times, values, strict=True) if start <= at < end and not math.isnan(v)]
        wanted = sum(own) / len(own) if own else math.nan
        assert mean == pytest.approx(wanted, rel=1e-12, abs=1e-9, nan_ok=True)


def test_nothing_of_one_interval_gets_into_another() -> None:
    """As running sums would let it: a huge value and an infinity before small ones."""
    values = np.array([1e18, 1.0, math.inf, 3.0, 5.0])
    found = mean_over(ints([0, 10, 20, 30, 31]), values, ints([0, 10, 20, 30]), ints([10, 20, 30, 40]))
    assert found.tolist() == [1e18, 1.0, math.inf, 4.0]


def test_the_typical_interval_is_the_usual_one() -> None:
    one_hour = 3600
    counts, first = ints([3600, 3600, 1, 2]), ints([0, one_hour, 20 * one_hour, 40 * one_hour])
    last = first + ints([3599, 3599, 0, 1000])
    assert typical_interval(counts, first, last) == 1.0
    assert typical_interval(ints([1, 1, 1]), ints([0, 100, 500]), ints([0, 100, 500])) in (100.0, 400.0)
    assert math.isnan(typical_interval(ints([1]), ints([5]), ints([5])))


def test_a_shot_ends_with_its_steps_else_with_the_next_shot_else_after_the_usual_time() -> None:
    machine = ints([0, 10, 20, 30, 1000, 1010])
    durations = np.array([4.0, math.nan, math.nan, math.nan])
    ends, known = ends_of_shots(ints([0, 10, 30, 1010]), durations, machine)
    assert ends.tolist() == [4, 20, 40, 1020]
    assert known.all()
    ends, known = ends_of_shots(ints([5]), np.array([math.nan]), ints([5]))
    assert not known.any()
    ends, known = ends_of_shots(ints([5]), np.array([3.0]), ints([5]))
    assert (ends.tolist(), known.tolist()) == ([8], [True])
