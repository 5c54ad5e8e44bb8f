"""What screens say of passes, of shots without a place, of fits of other rounds, and of what is not determined."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.opening import open_store
from nightfold_cli.commands.fits import _estimates
from nightfold_cli.estimates import plain_rows, rows, unit_text
from nightfold_cli.refits import _moved, _value

Show = Callable[..., str]
START = datetime(2026, 10, 5, 18, tzinfo=UTC)


def shot(number: int, value: float, label: str = "decay") -> dict[str, Any]:
    return {
        "uid": f"{label}-{number:03d}", "machine": "heron", "sequence": "hold", "scan": label, "swept": ["hold"],
        "started": (START + timedelta(seconds=20 * number)).isoformat(),
        "parameters": {"hold": {"value": value, "unit": "s"}}, "observables": {"n": 1000.0 * math.exp(-value)},
    }  # fmt: skip


@pytest.fixture
def where(tmp_path: Path) -> Path:
    path = tmp_path / "s.sqlite"
    with open_store(path, create=True) as store:
        store.take([shot(n, 0.1 * (n % 6)) for n in range(24)])
        store.take(
            [shot(n + 100, math.nan if n == 2 else math.inf if n == 4 else n, "once") for n in range(8)]
        )
        store.take([shot(n + 4000, 0.1 * n, "again") for n in range(6)])
        store.fit("again", "exponential", observable="n")
        store.take([{**shot(n + 90000, 0.1 * n, "again"), "uid": f"late-{n}"} for n in range(6)])
    return path


@pytest.mark.parametrize(
    ("key", "said"),
    [
        ("decay", "rising hold, 4 times over: drift from one pass to the next shows as scatter"),
        ("once", "2 shots without a finite hold"),
        ("again#1", "drift would look like a feature"),
    ],
)
def test_a_scan_tells_passes_and_shots_without_a_place(
    where: Path, on_screen: Show, key: str, said: str
) -> None:
    text = on_screen("--store", where, "scan", key)
    assert said in " ".join(text.split())
    assert ("drift would look" in text) == (key == "again#1")


def test_fits_of_another_round_are_told(where: Path, on_screen: Show) -> None:
    text = on_screen("--store", where, "fits", "again#2")
    assert "none of again#2; again#1 has 1" in text


def test_what_is_not_determined_has_not_moved(where: Path) -> None:
    with open_store(where) as store:
        (kept,) = store.fits("again#1")
    name = next(iter(kept.estimates))
    lost = replace(kept, estimates={**kept.estimates, name: replace(kept.estimates[name], stderr=math.inf)})
    assert _value(lost, name) == "not determined"
    assert (_moved(lost, kept, name), _moved(kept, lost, name)) == ("", "")
    assert _moved(kept, kept, name) != ""


def test_no_unit_stands_behind_words(where: Path) -> None:
    with open_store(where) as store:
        (kept,) = store.fits("again#1")
    estimate = kept.estimates["lifetime"]
    lost = replace(kept, estimates={"lifetime": replace(estimate, stderr=math.inf)})
    assert (estimate.unit, unit_text(estimate), unit_text(lost.estimates["lifetime"])) == ("s", "s", "")
    assert _estimates(lost) == ["lifetime not determined"]
    assert rows(lost.estimates, ())[0][:3] == ["lifetime", "not determined", ""]  # type: ignore[arg-type]
    assert plain_rows(lost.estimates)[0][3] == "s"
