from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold import open_store


@pytest.fixture
def odd(at_home: Path) -> Path:
    """Return a store with a scan of one shot and one of scattered points."""
    where = at_home / "odd.sqlite"
    points = np.random.default_rng(3).random((12, 2)).round(3)
    shots: list[dict[str, Any]] = [{"scan": "one", "parameters": {"coil_current": 61.0}}]
    shots += [
        {"scan": "search", "parameters": {"coil_current": a, "hold_time": b}, "swept": ["coil_current", "hold_time"]}
        for a, b in points.tolist()
    ]  # fmt: skip
    with open_store(where, create=True) as store:
        store.take(
            {"machine": "heron", "started": f"2026-10-05T20:{k:02d}:00Z", "sequence": "hold",
             "observables": {"atom_number": 1e5 + k}, **shot}
            for k, shot in enumerate(shots)
        )  # fmt: skip
    return where


@pytest.mark.parametrize("width", [80, 120])
def test_a_scan_of_one_shot(odd: Path, on_screen: Callable[..., str], width: int) -> None:
    text = on_screen("--store", odd, "scan", "one", width=width)
    assert "  taken  2026-10-05 20:00:00 UTC\n" in text
    assert "a chart needs two points" in text


@pytest.mark.parametrize("width", [80, 120])
def test_scattered_points(odd: Path, on_screen: Callable[..., str], width: int) -> None:
    text = on_screen("--store", odd, "scan", "search", width=width)
    assert "  shots  12, at scattered points\n" in text
    assert "scattered points make no map; next: nightfold export search#1 FILE" in text
    line = next(
        line for line in on_screen("--store", odd, "scans", width=width).split("\n") if "search" in line
    )
    assert " 12 " in line
    assert "scattered" in on_screen("--store", odd, "scans", width=width)


def test_too_few_points_for_a_fit_is_said_in_words(odd: Path, run: Callable[..., Any]) -> None:
    answer = run("--store", odd, "fit", "one", "lorentzian", "-o", "atom_number")
    assert (answer.code, answer.out) == (2, "")
    assert "scan one#1: nothing was swept, so there is nothing to fit along" in answer.err
