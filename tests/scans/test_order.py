from __future__ import annotations

from itertools import product

import numpy as np
import pytest

from nightfold import Store
from nightfold.scans.order import order_of, orders_of

LINE = np.linspace(58.0, 64.0, 13).tolist()


@pytest.mark.parametrize(
    ("values", "order"),
    [
        (LINE, "rising"),
        (LINE[::-1], "falling"),
        (np.repeat(LINE, 3).tolist(), "rising"),
        (LINE * 4, "rising"),
        (LINE[::-1] * 2, "falling"),
        (LINE + LINE[::-1], "mixed"),
        (LINE[::2] + LINE[1::2], "rising"),
        ([*LINE[:6], *LINE[3:]], "mixed"),
        ([*LINE[:12], *LINE[1:]], "rising"),
        ([1.0, 2.0, 1.0, 2.0], None),
        ([1.0], None),
        ([True, False, True], None),
        (["a", "b", "c"], None),
        ([1.0, None, 2.0, float("nan"), 3.0], "rising"),
        ([1.0, 1.0 + 1e-12, 1.0, 2.0, 3.0], "rising"),
    ],
)
def test_order_of_an_axis(values: list[float], order: str | None) -> None:
    assert order_of(values) == order


def test_a_grid_taken_row_by_row_is_in_order_along_both_axes() -> None:
    slow, fast = zip(*product(range(5), range(7)), strict=True)
    assert orders_of({"slow": slow, "fast": fast}) == {"slow": "rising", "fast": "rising"}


def test_rows_to_and_fro_leave_the_fast_axis_mixed() -> None:
    rows = [[(slow, fast) for fast in range(7)][:: 1 - 2 * (slow % 2)] for slow in range(5)]
    slow, fast = zip(*(point for row in rows for point in row), strict=True)
    assert orders_of({"slow": slow, "fast": fast}) == {"slow": "rising", "fast": "mixed"}


def test_rows_in_random_order_leave_the_slow_axis_mixed() -> None:
    slow, fast = zip(*product([3, 0, 4, 1, 2], range(7)), strict=True)
    assert orders_of({"slow": slow, "fast": fast}) == {"slow": "mixed", "fast": "rising"}


def test_shuffled_points_are_hardly_ever_in_order() -> None:
    rng = np.random.default_rng(1)
    assert {order_of(rng.permutation(np.repeat(LINE, 2)).tolist()) for _ in range(2000)} == {"mixed"}
    short = [order_of(rng.permutation(5).tolist()) for _ in range(5000)]
    assert np.mean([order != "mixed" for order in short]) < 0.03  # 2 of 120 are in order


def test_a_scan_says_in_what_order_it_was_taken(store: Store) -> None:
    records = [
        {
            "machine": "heron",
            "started": f"2026-10-05T20:{minute:02d}:00Z",
            "sequence": "hold",
            "scan": "map",
            "swept": ["coil_current", "hold_time", "started"],
            "parameters": {"coil_current": current, "hold_time": hold, "started": late},
            "observables": {"atom_number": 1e5},
        }
        for minute, (current, hold, late) in enumerate(
            product([60.0, 61.0, 62.0], [7.0, 3.0, 5.0], [True, False])
        )
    ]
    store.take(records)
    scan = store.scan("map")
    assert scan.order == {"coil_current": "rising", "hold_time": "mixed"}
    dataset = scan.dataset()
    assert dataset.coil_current.attrs["order_taken"] == "rising"
    assert dataset.hold_time.attrs["order_taken"] == "mixed"
    assert "order_taken" not in dataset["started_"].attrs
