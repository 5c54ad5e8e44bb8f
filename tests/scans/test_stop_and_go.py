"""Scans as they happen: broken off and taken up, point by point as one sees fit, or of one shot only."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold import Store, open_store
from nightfold.errors import FitError
from nightfold.timestamps import to_us

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
HOUR = 3600
GRID = np.linspace(58, 64, 13)


def shots(
    first: float, points: Iterable[Any], *, label: str | None = None, cycle: float = 15, **more: Any
) -> list[dict[str, Any]]:
    """Return shots; a point is a current, or settings by name."""
    return [
        {
            "machine": "heron",
            "started": (START + timedelta(seconds=first + cycle * k)).isoformat(),
            "sequence": "hold",
            "parameters": {
                "coil_current": 60.0,
                "hold_time": 120.0,
                **(point if isinstance(point, dict) else {"coil_current": float(point)}),
            },
            "observables": {"atom_number": {"value": 1e5, "stderr": 3e3}},
            **({"scan": label} if label else {}),
            **more,
        }
        for k, point in enumerate(points)
    ]


def sizes(store: Store) -> list[tuple[str, int]]:
    return [(scan.key, scan.shots) for scan in store.scans()]


@pytest.fixture
def opened(anywhere: str) -> Iterable[Store]:
    with open_store(anywhere) as store:
        yield store


def test_the_card_says_for_how_long_a_label_resumes_its_round(opened: Store, tmp_path: Path) -> None:
    card = tmp_path / "heron.toml"
    card.write_text('machine = "heron"\nzone = "Europe/Vienna"\nrejoin_within = "3 h"\n')
    opened.use_card(card)
    swept: dict[str, Any] = {"label": "loss", "swept": ["coil_current"]}
    opened.take(shots(0, GRID[:5], **swept))
    opened.take(shots(2 * HOUR, GRID[5:], **swept))  # broken off and taken up
    assert sizes(opened) == [("loss#1", 13)]
    assert dict(opened.scan("loss").dataset().sizes) == {"coil_current": 13}
    opened.take(shots(6 * HOUR, GRID, **swept))
    assert sizes(opened) == [("loss#1", 13), ("loss#2", 13)]


def test_a_scan_goes_on_the_next_night(opened: Store) -> None:
    opened.take(shots(0, GRID[:6], label="loss", planned_shots=13))
    opened.take(shots(23 * HOUR, GRID[6:], label="loss", planned_shots=13))
    (scan,) = opened.scans()
    assert (scan.key, scan.shots, scan.complete) == ("loss#1", 13, True)
    assert (scan.last - scan.first) > timedelta(hours=22)


@pytest.mark.parametrize("label", ["loss", None])
def test_a_scan_that_went_on_the_next_night_is_complete_after_five_usual_cycles(
    opened: Store, monkeypatch: pytest.MonkeyPatch, label: str | None
) -> None:
    if label is None:
        opened.take(shots(0, GRID, swept=["coil_current"]))
        opened.take(shots(23 * HOUR, GRID, swept=["coil_current"]))
        opened.join_scans([1, 2])
    else:
        opened.take(shots(0, GRID[:6], label=label))
        opened.take(shots(23 * HOUR, GRID[6:], label=label))
    (scan,) = opened.scans()
    for cycles, complete in ((4.9, False), (5.1, True)):
        now = to_us(scan.last + timedelta(seconds=15 * cycles))
        monkeypatch.setattr("nightfold.scans.listing.now_us", lambda now=now: now)
        assert opened.scans()[0].complete is complete


def test_the_first_shot_of_a_scan_has_five_minutes(opened: Store, monkeypatch: pytest.MonkeyPatch) -> None:
    opened.take(shots(0, [60.0], label="loss"))
    for minutes, complete in ((4.9, False), (5.1, True)):
        now = to_us(START + timedelta(minutes=minutes))
        monkeypatch.setattr("nightfold.scans.listing.now_us", lambda now=now: now)
        assert opened.scan("loss").complete is complete


@pytest.mark.parametrize("said", [{"swept": ["coil_current"]}, {}])
def test_points_chosen_one_by_one_make_an_axis(opened: Store, said: dict[str, Any]) -> None:
    points = [60, 64, 62, 61, 61.5, 61.25, 61.3, 61.35, 61.3]
    for record in shots(0, points, label="search", **said):
        opened.take([record])
    scan = opened.scan("search")
    assert [(axis.parameter, axis.points) for axis in scan.axes] == [("coil_current", 8)]
    assert scan.order == {"coil_current": "mixed"}
    dataset = scan.dataset()
    assert dict(dataset.sizes) == {"coil_current": 8, "repeat": 2}
    assert dataset.coil_current.values.tolist() == sorted(set(points))


@pytest.mark.parametrize("said", [{"swept": ["coil_current", "hold_time"]}, {}])
def test_points_chosen_one_by_one_over_two_axes_are_scattered(opened: Store, said: dict[str, Any]) -> None:
    rng = np.random.default_rng(2)
    points = [dict(zip(("coil_current", "hold_time"), rng.random(2), strict=True)) for _ in range(12)]
    for record in shots(0, points, label="search", **said):
        opened.take([record])
    scan = opened.scan("search")
    assert scan.scattered
    dataset = scan.dataset()
    assert dict(dataset.sizes) == {"shot": 12}
    assert dataset.hold_time.values.tolist() == [point["hold_time"] for point in points]


@pytest.mark.parametrize(
    ("said", "sizes", "problem"),
    [
        ({}, {"repeat": 1}, "one#1: nothing was swept, so there is nothing to fit along"),
        ({"swept": ["coil_current"]}, {"coil_current": 1}, "1 point, but lorentzian has 4 free parameters"),
    ],
)
def test_a_scan_of_one_shot(opened: Store, said: dict[str, Any], sizes: dict[str, int], problem: str) -> None:
    opened.take(shots(0, [61.0], label="one", **said))
    scan = opened.scan("one")
    assert (scan.shots, scan.first, scan.last, scan.order) == (1, START, START, {})
    assert dict(scan.dataset().sizes) == sizes
    assert len(scan.table()) == 1
    with pytest.raises(FitError, match=problem):
        opened.fit(scan, "lorentzian", observable="atom_number")
    assert opened.fits() == []


def test_two_labels_taken_in_turn_go_on_in_turn(opened: Store) -> None:
    up = shots(0, GRID, label="up", cycle=30)
    down = shots(15, GRID[::-1], label="down", cycle=30)
    for pair in zip(up, down, strict=True):
        for record in pair:
            opened.take([record])
    assert sizes(opened) == [("up#1", 13), ("down#1", 13)]
    assert [scan.order["coil_current"] for scan in opened.scans()] == ["rising", "falling"]


def test_a_found_scan_taken_up_after_a_pause_is_another_until_they_are_joined(opened: Store) -> None:
    opened.take(shots(0, GRID[:7]))
    opened.take(shots(2 * HOUR, GRID[7:]))
    assert [scan.shots for scan in opened.scans()] == [7, 6]
    whole = opened.join_scans([1, 2])
    assert dict(whole.dataset().sizes) == {"coil_current": 13}


def test_a_round_that_only_loses_shots_has_its_axes_looked_at_again(opened: Store) -> None:
    once = [{"coil_current": x, "synth": 2 * x} for x in GRID.tolist()]
    again = [{"coil_current": x, "synth": 3 * x} for x in GRID.tolist()]
    opened.take(shots(0, once, label="loss", swept=["coil_current"]))
    opened.take(shots(600, again, label="loss", swept=["coil_current"]))
    assert opened.scan("loss").followers == {}
    opened.take(shots(300, [{"hold_time": 20.0}], label="loss", swept=["hold_time"]))
    assert sizes(opened) == [("loss#1", 13), ("loss#2", 1), ("loss#3", 13)]
    assert [opened.scan(key).followers for key in ("loss#1", "loss#3")] == [{"synth": "coil_current"}] * 2
