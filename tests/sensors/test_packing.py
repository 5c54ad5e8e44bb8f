"""Readings packed by the hour: exact, small, and never read wrongly."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from nightfold.sensors.packing import HEAD_BYTES, HOUR_US, Head, pack, read_head, unpack

OFFSETS = st.lists(st.integers(0, HOUR_US - 1), min_size=1, max_size=300, unique=True).map(sorted)
VALUES = st.one_of(
    st.floats(width=64),
    st.sampled_from([0.0, -0.0, math.nan, math.inf, -math.inf, 21.3, 21.31, 5e-324, 1.7976931348623157e308]),
)


@given(OFFSETS, st.data())
def test_what_is_unpacked_is_what_was_packed_bit_for_bit(offsets: list[int], data: st.DataObject) -> None:
    values = data.draw(arrays.arrays(np.float64, len(offsets), elements=VALUES))
    given_offsets = np.array(offsets, np.uint32)
    packed = pack(given_offsets, values)
    found_offsets, found = unpack(packed)
    assert found_offsets.dtype == np.uint32
    assert found_offsets.tolist() == offsets
    assert found.tobytes() == values.tobytes()
    finite = values[np.isfinite(values)]
    head = read_head(packed[:HEAD_BYTES])
    assert (head.n, head.finite) == (len(values), len(finite))
    if len(finite):
        assert (head.low, head.high) == (finite.min(), finite.max())


@pytest.mark.parametrize("different", [1, 2, 255, 256, 257, 1800, 3600])
def test_few_values_and_many_are_both_exact(different: int) -> None:
    rng = np.random.default_rng(different)
    values = rng.normal(size=different)[rng.integers(0, different, 3600)]
    offsets = np.arange(3600, dtype=np.uint32) * 1_000_000
    assert unpack(pack(offsets, values))[1].tobytes() == values.tobytes()


def test_the_head_tells_lowest_sum_and_highest() -> None:
    offsets = np.arange(5, dtype=np.uint32)
    values = np.array([1.5, math.nan, -2.0, math.inf, 4.0])
    assert read_head(pack(offsets, values)) == Head(5, 3, -2.0, 3.5, 4.0)
    nothing = read_head(pack(offsets[:2], np.array([math.nan, math.inf])))
    assert (nothing.n, nothing.finite, nothing.total) == (2, 0, 0.0)
    assert math.isnan(nothing.low)
    assert math.isnan(nothing.high)


def test_a_real_sensor_takes_few_bytes() -> None:
    """The figures that docs/sensors.md states, with room for another zlib."""
    rng = np.random.default_rng(1)
    steady = np.arange(3600) * 1_000_000
    jittered = (steady + rng.integers(5000, 25000, 3600) // 1000 * 1000).astype(np.uint32)
    drifting = 21.3 + 0.3 * np.sin(2 * np.pi * np.arange(3600) / 3600) + 0.02 * rng.normal(size=3600)
    rounded = np.round(drifting, 2)
    assert len(pack(steady.astype(np.uint32), rounded)) / 3600 < 1.0
    assert len(pack(jittered, rounded)) / 3600 < 3.0
    assert len(pack(jittered, drifting)) / 3600 < 9.0


def test_damaged_bytes_are_told() -> None:
    packed = pack(np.arange(4, dtype=np.uint32), np.arange(4.0))
    for wrong, reason in (
        (b"", "format none, wanted 01"),
        (b"\x07" + packed[1:], "format 07"),
        (packed[:-3], "damaged"),
        (packed[:HEAD_BYTES] + packed[HEAD_BYTES:][::-1], "damaged"),
    ):
        with pytest.raises(ValueError, match=reason):
            unpack(wrong)
