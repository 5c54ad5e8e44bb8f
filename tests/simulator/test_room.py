"""Sensors of heron: one reading a minute, across the clock change, with what an edit did to the room."""

from __future__ import annotations

import csv
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from nightfold.simulator import Campaign, write_campaign

Reading = tuple[datetime, float, float, float]


@pytest.fixture(scope="module")
def campaign(tmp_path_factory: pytest.TempPathFactory) -> Campaign:
    return write_campaign(tmp_path_factory.mktemp("room"), nights=21)


@pytest.fixture(scope="module")
def readings(campaign: Campaign) -> list[Reading]:
    with campaign.sensors.open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    assert rows[0][1:] == [
        "room_temperature [degC]",
        "coil_temperature [degC]",
        "vacuum_pressure [mbar]",
    ]
    return [(datetime.fromisoformat(row[0]), float(row[1]), float(row[2]), float(row[3])) for row in rows[1:]]


def test_one_reading_a_minute_all_the_time(readings: list[Reading]) -> None:
    assert all(later - earlier == timedelta(minutes=1) for earlier, later in pairwise(r[0] for r in readings))
    assert len(readings) == 29 * 1440 + 12 * 60 + 60  # one day has 25 hours
    assert {reading[0].utcoffset() for reading in readings} == {timedelta(hours=1), timedelta(hours=2)}


def test_the_room_is_warmer_without_the_fan(campaign: Campaign, readings: list[Reading]) -> None:
    (warming,) = campaign.warmings
    edit = next(edit for edit in campaign.edits if edit.parameter == warming.cause)
    assert (warming.sensor, warming.at) == ("room_temperature", edit.at)
    day = timedelta(days=1)
    before = [read[1] for read in readings if warming.at - 5 * day < read[0] < warming.at]
    after = [read[1] for read in readings if warming.at + day < read[0] < warming.at + 6 * day]
    assert np.mean(after) - np.mean(before) == pytest.approx(warming.step, abs=0.01)


def test_coils_are_warm_while_shots_are_taken(campaign: Campaign, readings: list[Reading]) -> None:
    evening = [
        read[2] for read in readings if read[0].date().isoformat() == "2026-10-05" and read[0].hour == 20
    ]
    sunday = [read[2] for read in readings if read[0].date().isoformat() == "2026-10-04"]
    assert max(evening) - np.mean(sunday) > 3
    assert np.ptp(sunday) < 0.5


def test_same_seed_same_bytes(tmp_path: Path) -> None:
    one, other = (write_campaign(tmp_path / name, nights=1).sensors for name in ("one", "other"))
    assert one.read_bytes() == other.read_bytes()
    assert not write_campaign(tmp_path / "one", nights=1).warmings
