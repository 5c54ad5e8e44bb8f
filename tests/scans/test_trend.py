from __future__ import annotations

import numpy as np

from nightfold.scans.trend import HEIGHTS, trend


def test_each_point_is_the_mean_of_its_shots() -> None:
    assert trend([1, 2, 3, 3], [0.0, 10.0, 15.0, 25.0]) == "▁▅█"
    assert trend(np.arange(8), np.arange(8.0)) == HEIGHTS


def test_blanks_flat_lines_and_nothing() -> None:
    nan = float("nan")
    assert trend([1, 2, 3], [1.0, nan, 2.0]) == "▁ █"
    assert trend([1, 2, 3], [5.0] * 3) == "▄▄▄"
    assert trend([1, 2], [nan, nan]) == "  "
    assert trend([], []) == ""
    assert trend([nan, 1.0], [7.0, 8.0]) == "▄"
    assert trend(["b", "a"], [1.0, 2.0]) == "█▁"


def test_more_points_than_room_are_averaged() -> None:
    assert trend(np.arange(100), np.arange(100.0), width=8) == HEIGHTS
    assert len(trend(np.arange(101), np.arange(101.0), width=24)) == 24


def test_numbers_near_the_largest_float() -> None:
    assert trend([1, 2], [-1.7e308, 1.7e308]) == "▁█"
