"""Durations in words, starts in a column, bars in time."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold_cli.clock import Bar, bars, lasting, starts
from nightfold_cli.sparklines import sparklines

NAN = math.nan


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (10.0, "10 s"), (8.388440, "8.38844 s"), (0.0084, "8.4 ms"), (1e-3, "1 ms"), (0.001 - 1e-13, "1 ms"),
        (5e-6, "5 µs"), (3.5e-4, "350 µs"), (2e-9, "2 ns"), (1e-12, "0.001 ns"), (90.0, "90 s"), (0.0, "0 s"),
        (-0.002, "-2 ms"), (NAN, "?"), (math.inf, "?"),
    ],
)  # fmt: skip
def test_durations_in_the_unit_that_suits_them(seconds: float, text: str) -> None:
    assert lasting(seconds) == text


def test_starts_are_aligned_and_say_what_is_not_known() -> None:
    assert starts([10.0, 0.04, 5e-6, 1.0]) == (
        [" 0       ", "10       ", "10.04    ", "10.040005"],
        "s",
    )
    assert starts([0.001, NAN, 0.002, 0.5]) == (["0", "1", "1 +?", "3 +?"], "ms")
    assert starts([2.0, 1.0, 3e-6])[0] == ["0", "2", "3"]
    assert starts([3e-6, 1.0, 1.0])[0] == ["0       ", "0.000003", "1.000003"]
    assert starts([3.0]) == (["0"], "s")
    assert starts([]) == ([], "s")


def test_bars_are_to_scale_where_that_can_be_seen() -> None:
    assert bars([3.0, 1.0, 2.0], 12) == ([Bar(0, 6, "bar"), Bar(6, 2, "bar"), Bar(8, 4, "bar")], "linear")
    assert bars([0.5, 0.5], 1)[1] == "linear"


def test_bars_by_logarithm_where_it_cannot() -> None:
    placed, scale = bars([10.0, 0.1, 0.001], 18)
    assert scale == "logarithm", "10 s is 4 decades above 1 ms, 0.1 s 2: units of 5, 3, 1 in 18 cells"
    assert placed == [Bar(0, 10, "bar"), Bar(10, 6, "bar"), Bar(16, 2, "bar")]


def test_bars_of_many_steps_begin_at_the_left() -> None:
    placed, scale = bars([10.0, *[5e-6] * 99], 40)
    assert scale == "crowded"
    assert {bar.start for bar in placed} == {0}
    assert placed[0].length == round(5 * (1 + math.log10(2e6)))
    assert placed[1].length == 5


def test_what_has_no_length_is_a_mark() -> None:
    placed, scale = bars([1.0, 0.0, NAN, -1.0, 1.0], 9)
    assert [bar.kind for bar in placed] == ["bar", "mark", "unknown", "mark", "bar"]
    assert [(bar.start, bar.length) for bar in placed] == [(0, 3), (3, 1), (4, 1), (5, 1), (6, 3)]
    assert scale == "linear"
    assert bars([NAN, NAN], 10)[0] == [Bar(0, 1, "unknown"), Bar(1, 1, "unknown")]
    assert bars([], 10) == ([], "linear")


@given(
    st.lists(st.one_of(st.floats(1e-9, 1e3), st.sampled_from([0.0, NAN, -1.0])), max_size=80),
    st.integers(12, 90),
)
def test_no_bar_leaves_its_room(durations: list[float], width: int) -> None:
    placed, _ = bars(durations, width)
    assert len(placed) == len(durations)
    assert all(bar.start >= 0 and bar.length >= 1 and bar.start + bar.length <= width for bar in placed)
    begun = [bar.start for bar in placed]
    assert begun == sorted(begun)


def test_ramps_on_one_scale() -> None:
    assert sparklines([[0, 1, 2, 3]], 10, unicode=True) == ["▁▃▆█"]
    assert sparklines([[0, 7], [3.5, 14]], 10, unicode=True) == ["▁▅", "▃█"]
    assert sparklines([[0, 7]], 10, unicode=False) == ["_%"]
    assert sparklines([[5, 5, 5]], 10, unicode=True) == ["▄▄▄"]
    (line,) = sparklines([list(range(1000))], 8, unicode=True)
    assert line == "▁▂▃▄▅▆▇█"
    assert sparklines([[], [1]], 8, unicode=True) == ["", "▄"]
