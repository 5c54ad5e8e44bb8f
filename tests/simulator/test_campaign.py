"""Files of a campaign: named by night, sized as the real thing, the same for the same seed."""

from __future__ import annotations

import json
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from nightfold.simulator import Campaign, shot_records, write_campaign
from nightfold.simulator.machine import ZONE


@pytest.fixture(scope="module")
def campaign(tmp_path_factory: pytest.TempPathFactory) -> Campaign:
    return write_campaign(tmp_path_factory.mktemp("heron"))


def read(path: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in path.read_text(encoding="utf-8").splitlines()]


def shots(path: Path) -> list[dict[str, Any]]:
    """Return the records of a file without those that bring something later."""
    return [record for record in read(path) if "started" in record]


def test_one_file_a_night_named_by_the_evening(campaign: Campaign) -> None:
    assert len(campaign.files) == 30
    assert campaign.files[0].name == "2026-09-28.jsonl"
    assert campaign.files[-1].name == "2026-11-06.jsonl"
    for path in campaign.files:
        for record in shots(path):
            started = datetime.fromisoformat(record["started"])
            assert (started - timedelta(hours=12)).date().isoformat() == path.stem
            assert started.hour >= 20 or started.hour < 4 or "-a0" in record["uid"]


def test_times_follow_the_zone_and_never_go_back(campaign: Campaign) -> None:
    zone = ZoneInfo(ZONE)
    times = [datetime.fromisoformat(record["started"]) for path in campaign.files for record in shots(path)]
    assert all(earlier < later for earlier, later in pairwise(times))
    assert all(time.utcoffset() == time.astimezone(zone).utcoffset() for time in times)
    assert {time.utcoffset() for time in times} == {timedelta(hours=1), timedelta(hours=2)}
    assert any(time.hour in (0, 1) for time in times)


def test_sizes(campaign: Campaign) -> None:
    counts = [len(shots(path)) for path in campaign.files]
    assert campaign.shots == sum(counts)
    assert 5000 <= campaign.shots <= 7000
    assert all(120 <= count <= 350 for count in counts)
    lines = [line for path in campaign.files for line in path.read_bytes().splitlines()]
    assert all(3900 < len(line) < 6100 for line in lines if b'"started"' in line)


def test_card_lies_beside_the_files(campaign: Campaign) -> None:
    assert campaign.card.name == "heron.toml"
    assert campaign.card.parent == campaign.files[0].parent


def test_same_seed_same_bytes(tmp_path: Path) -> None:
    first, again = (write_campaign(tmp_path / name, nights=2) for name in ("first", "again"))
    other = write_campaign(tmp_path / "other", nights=2, seed=7)
    assert [path.read_bytes() for path in first.files] == [path.read_bytes() for path in again.files]
    assert first.truths == again.truths
    assert first.files[0].read_bytes() != other.files[0].read_bytes()


def test_fewer_nights_are_the_beginning_of_more(campaign: Campaign, tmp_path: Path) -> None:
    short = write_campaign(tmp_path, nights=3)
    assert [path.read_bytes() for path in short.files] == [path.read_bytes() for path in campaign.files[:3]]
    assert short.truths == campaign.truths[: len(short.truths)]
    assert len(short.truths) >= 6


def test_records_without_files_are_the_same(campaign: Campaign) -> None:
    records = [record for path in campaign.files[:7] for record in read(path)]
    assert list(shot_records(nights=7)) == records
    assert any("started" not in record for record in records)


def test_progress_counts_nights(tmp_path: Path) -> None:
    told: list[int] = []
    write_campaign(tmp_path, nights=3, progress=told.append)
    assert told == [1, 2, 3]


def test_no_nights_are_refused(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="cannot run for 0 nights"):
        write_campaign(tmp_path, nights=0)
