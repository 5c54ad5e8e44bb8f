from __future__ import annotations

import random
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.scans.axes import Axis, choose_axes, co_moving, count_turns, describe_axis, merge_jitter
from nightfold.scans.columns import encode

STEPS = [0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0]


# --- jitter


def test_jitter_is_merged_by_a_millionth_of_the_span() -> None:
    centres, index = merge_jitter(np.array([2.0, 0.1 + 0.2, 0.3, 1.0, np.nan, 0.3]))
    assert centres.tolist() == [0.3, 1.0, 2.0]
    assert index.tolist() == [2, 0, 0, 1, -1, 0]


def test_jitter_by_a_given_tolerance() -> None:
    values = np.array([1.004, 2.0, 0.998, 1.0, 2.003])
    assert merge_jitter(values, 0.01)[0].tolist() == [1.0, 2.0]
    assert merge_jitter(values, 0.0)[0].tolist() == [0.998, 1.0, 1.004, 2.0, 2.003]


def test_nothing_to_merge() -> None:
    centres, index = merge_jitter(np.array([np.nan, np.nan]))
    assert centres.tolist() == []
    assert index.tolist() == [-1, -1]
    assert merge_jitter(np.array([]))[0].tolist() == []
    assert merge_jitter(np.array([np.inf, 1.0, -np.inf, np.inf]))[0].tolist() == [-np.inf, 1.0, np.inf]


def test_a_line_at_384_thz_keeps_its_points() -> None:
    values = 384.23e12 + 1e5 * np.arange(60.0)
    centres, _ = merge_jitter(values)
    np.testing.assert_array_equal(centres, values)


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=30), st.randoms())
def test_order_does_not_matter_to_merging(values: list[float], draw: random.Random) -> None:
    order = list(range(len(values)))
    draw.shuffle(order)
    centres, index = merge_jitter(np.array(values))
    other, other_index = merge_jitter(np.array(values)[order])
    np.testing.assert_array_equal(centres, other)
    np.testing.assert_array_equal(index[order], other_index)
    assert set(centres) <= set(values)
    assert (np.diff(centres) > 0).all()


# --- kinds


def test_columns_of_every_kind() -> None:
    assert encode([3, 1.0, None, 3.0]).codes.tolist() == [1, 0, -1, 1]
    assert encode(["b", "a", None]).values.tolist() == ["a", "b"]
    assert encode([True, False, True]).values.tolist() == [False, True]
    assert encode([1.0, "1.0", True]).values.tolist() == ["1.0", "True"]
    assert encode([None, None]).points == 0


def test_describe_axis() -> None:
    assert describe_axis("x", "ms", [2.0, 1.0, 2.0]) == Axis("x", "ms", 2, 1.0, 2.0, (1.0, 2.0))
    assert describe_axis("s", "", ["up", "down"]) == Axis("s", "", 2, None, None, ("down", "up"))
    assert describe_axis("t", "", [True, True]) == Axis("t", "", 1, None, None, (True,))
    assert describe_axis("x", "ms", [None]) == Axis("x", "ms", 0, None, None, ())


# --- moving together


@pytest.mark.parametrize(
    ("leader", "follower"),
    [
        (STEPS, [3 * x + 1 for x in STEPS]),
        (STEPS, [-(x**3) for x in STEPS]),
        ([1.0, 2.0, 4.0], [2.0, 4.0, 8.0]),
        ([4.0, 1.0, 3.0, 0.0, 2.0], [16.0, 1.0, 9.0, 0.0, 4.0]),
        ([1.0, 2.0, 3.0] * 2, [5.0, 1.0, 9.0] * 2),
        (STEPS * 2, [x // 3 for x in STEPS] * 2),
        (["up", "down"] * 4, [12.5, 80.0] * 4),
        (["a", "b", "c"] * 2, ["x", "y", "y"] * 2),
        ([k / 5 for k in range(30)] * 2, [float(np.sin(k / 5)) for k in range(30)] * 2),
    ],
)
def test_exact_functions_move_along(leader: list[Any], follower: list[Any]) -> None:
    assert co_moving(leader, follower)


@pytest.mark.parametrize(
    ("leader", "follower"),
    [
        (STEPS, [7.0] * 7),
        ([7.0] * 7, STEPS),
        (STEPS, [1.0, 1.0, 1.0, 1.0, 2.0, 2.0, 2.0]),
        ([x for x in STEPS for _ in range(3)], [1.0] * 12 + [2.0] * 9),
        (STEPS * 2, [0.0] * 7 + [1.0] * 7),
        ([1.0, 2.0, 3.0, 4.0], [1.0, 2.0, 4.0, 3.0]),
        (STEPS, [None, *STEPS[1:]]),
        ([], []),
    ],
    ids=["constant", "at rest", "edit", "edit between repeats", "outer", "four points", "missing", "empty"],
)
def test_what_does_not_move_along(leader: list[Any], follower: list[Any]) -> None:
    assert not co_moving(leader, follower)


def test_sparse_random_clouds_do_not_move_along() -> None:
    draw = np.random.default_rng(11)
    taken = 0
    for points in (6, 10, 20, 40):
        for repeats in (1, 2):
            for _ in range(100):
                x, y = draw.random((2, points))
                taken += co_moving(np.tile(x, repeats), np.tile(y, repeats))
    assert taken <= 2


def test_turning_points() -> None:
    assert count_turns([0, 1, 2, 3]) == 0
    assert count_turns([0, 2, 1, 3, 2]) == 3
    assert count_turns([1]) == count_turns([]) == 0


# --- choosing


def test_declared_axis_names_the_pair() -> None:
    columns = {"rf": [3 * x for x in STEPS], "coil": STEPS}
    assert choose_axes(columns, ["coil"]) == (("coil",), {"rf": "coil"})
    assert choose_axes(columns, ["rf"]) == (("rf",), {"coil": "rf"})
    assert choose_axes(columns, ["rf", "coil"]) == (("rf",), {"coil": "rf"})
    assert choose_axes(columns, []) == (("coil",), {"rf": "coil"})


def test_undeclared_parameter_that_follows_nothing_is_left_out() -> None:
    columns = {"x": STEPS, "reading": [3.0, 1.0, 2.0, 2.5, 0.0, 7.0, 1.5]}
    assert choose_axes(columns, ["x"]) == (("x",), {})


def test_swept_parameter_that_rests_stays_an_axis() -> None:
    assert choose_axes({"x": STEPS, "y": [1.0] * 7}, ["y", "x"]) == (("y", "x"), {})
    assert choose_axes({"x": [1.0]}, ["x"]) == (("x",), {})
    assert choose_axes({}, []) == ((), {})


def test_two_axes_with_a_follower_each_and_their_sum() -> None:
    x = [value for _ in range(3) for value in STEPS]
    y = [float(k) for k in (10, 20, 40) for _ in STEPS]
    columns = {
        "sum": [a + b for a, b in zip(x, y, strict=True)],
        "x squared": [a * a for a in x],
        "outer": [-b for b in y],
        "x": x,
        "y": y,
    }
    axes, followers = choose_axes(columns, ["x", "y"])
    assert (axes, followers) == (("x", "y"), {"x squared": "x", "outer": "y"})
    axes, followers = choose_axes(columns, [])
    assert (set(axes), set(followers.items())) == ({"x", "outer"}, {("x squared", "x"), ("y", "outer")})


@settings(max_examples=60, deadline=None)
@given(st.permutations(range(12)), st.sampled_from([-2.0, 0.5, 1e9]), st.floats(-1e3, 1e3))
def test_straight_lines_move_along_in_any_order(order: list[int], slope: float, offset: float) -> None:
    leader = [0.37 * k for k in order]
    assert co_moving(leader, [offset + slope * x for x in leader])
