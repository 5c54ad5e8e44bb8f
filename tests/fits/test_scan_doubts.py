"""What fits of scans know beyond their points: when each shot was taken, and its uid."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold import FitResult, Store, open_store

from .test_kept import line, records


def drifting(label: str, shuffled: bool) -> list[Any]:
    """Return a scan while the atom number wanders."""
    shots = records(label)
    rng = np.random.default_rng(3)
    x = np.linspace(59, 63, 21)
    x = rng.permutation(x) if shuffled else x
    y = line(x, 61.2) + 200 * rng.normal(size=21) + 4e3 * np.sin(np.linspace(0, 2.5 * np.pi, 21))
    for shot, current, number in zip(shots, x, y, strict=True):
        shot["parameters"]["coil_current"]["value"] = float(current)
        shot["observables"]["atom_number"] = {"value": float(number)}
    return shots


@pytest.fixture
def store(tmp_path: Path) -> Any:
    with open_store(tmp_path / "s.sqlite", create=True) as opened:
        yield opened


def codes(result: FitResult) -> dict[str, bool]:
    return {warning.code: warning.advisory for warning in result.warnings}


def test_the_order_of_shots_tells_a_drift(store: Store) -> None:
    store.take(drifting("ordered", False))
    store.take(drifting("shuffled", True))
    ordered, shuffled = (
        store.fit(key, "lorentzian", observable="atom_number") for key in ("ordered", "shuffled")
    )
    assert isinstance(ordered, FitResult)
    assert isinstance(shuffled, FitResult)
    assert codes(ordered)["drift-within-scan"] is False
    assert codes(shuffled) == {"drift-within-scan": True}


def test_outliers_are_named_by_uid(store: Store) -> None:
    shots = records("loss")
    shots[7]["observables"]["atom_number"]["value"] = 3e4
    store.take(shots)
    result = store.fit("loss", "lorentzian", observable="atom_number")
    assert isinstance(result, FitResult)
    (said,) = [warning for warning in result.warnings if warning.code == "outliers"]
    assert said.advisory
    assert "A (loss-7); look at what was recorded there" in said.message
    (kept,) = store.fits("loss")
    assert said in kept.warnings


def test_outliers_of_slices_are_named_by_uid(store: Store) -> None:
    shots = records("map", (100.0, 200.0), swept=("coil_current", "hold_time"))
    shots[30]["observables"]["atom_number"]["value"] = 3e4
    store.take(shots)
    store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    said = [w.message for fit in store.fits("map") for w in fit.warnings if w.code == "outliers"]
    assert len(said) == 1
    assert "(map-30)" in said[0]
