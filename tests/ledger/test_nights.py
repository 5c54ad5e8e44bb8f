"""Nights: from one boundary to the next, work that runs on staying with the night it began in."""

from __future__ import annotations

from datetime import date, datetime
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from nightfold.store import Store


def shots(
    *local: str, machine: str = "heron", zone: str = "Europe/Vienna", **fields: Any
) -> list[dict[str, Any]]:
    return [
        {"machine": machine, "sequence": "s", "parameters": {"a": 1},
         "started": datetime.fromisoformat(time).replace(tzinfo=ZoneInfo(zone)).isoformat(), **fields}
        for time in local
    ]  # fmt: skip


def use_card(store: Store, folder: Path, text: str = "", machine: str = "heron") -> None:
    path = folder / f"{machine}.toml"
    path.write_text(f'machine = "{machine}"\nzone = "Europe/Vienna"\n{text}\n')
    store.use_card(path)


def nights(store: Store) -> list[tuple[date, int]]:
    frame = store.nights()
    return list(zip(frame.night, frame.shots, strict=True))


def test_an_empty_store(store: Store) -> None:
    assert list(store.nights().columns) == [
        "night", "machine", "first", "last", "shots", "set_aside", "references", "scans", "sequences",
    ]  # fmt: skip
    assert store.nights().empty


def test_noon_to_noon_in_the_zone_of_the_card(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    store.take(
        shots(
            "2026-10-05 11:59:59",
            "2026-10-05 14:00",
            "2026-10-05 23:00",
            "2026-10-06 04:00",
            "2026-10-06 14:00",
        )
    )
    assert nights(store) == [(date(2026, 10, 4), 1), (date(2026, 10, 5), 3), (date(2026, 10, 6), 1)]
    assert [str(first) for first in store.nights()["first"]][1] == "2026-10-05 14:00:00+02:00"


def test_the_card_moves_the_boundary(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path, 'night_boundary = "08:00"')
    store.take(shots("2026-10-05 07:59", "2026-10-05 09:30", "2026-10-06 07:00"))
    assert nights(store) == [(date(2026, 10, 4), 1), (date(2026, 10, 5), 2)]


def test_work_that_runs_on_past_noon(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    store.take(shots(*[f"2026-10-06 {hour:02d}:{minute:02d}" for hour in range(8, 16) for minute in (0, 30)]))
    store.take(shots("2026-10-06 20:00"))
    assert nights(store) == [(date(2026, 10, 5), 16), (date(2026, 10, 6), 1)]


def test_a_pause_at_noon_parts_two_nights(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    store.take(shots("2026-10-06 11:00", "2026-10-06 11:30", "2026-10-06 12:30", "2026-10-06 13:00"))
    assert nights(store) == [(date(2026, 10, 5), 2), (date(2026, 10, 6), 2)]


def test_a_machine_that_never_pauses(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    clock = [f"{hour:02d}:{minute:02d}" for hour in range(24) for minute in (0, 20, 40)]
    store.take(shots(*[f"2026-10-{day:02d} {time}" for day in (5, 6, 7) for time in clock]))
    assert nights(store) == [
        (date(2026, 10, day), count) for day, count in ((4, 36), (5, 72), (6, 72), (7, 36))
    ]


@pytest.mark.parametrize(("evening", "hours"), [("2026-03-28", 23), ("2026-10-24", 25)])
def test_the_nights_of_daylight_saving(store: Store, tmp_path: Path, evening: str, hours: int) -> None:
    """Clock changes of Vienna in 2026: 29 March and 25 October (IANA time zone database)."""
    use_card(store, tmp_path)
    begin = datetime.fromisoformat(f"{evening} 12:00").replace(tzinfo=ZoneInfo("Europe/Vienna")).timestamp()
    store.take(
        {"machine": "heron", "sequence": "s", "parameters": {"a": hour},
         "started": datetime.fromtimestamp(begin + 3600 * hour, ZoneInfo("UTC")).isoformat()}
        for hour in range(-1, hours + 1)
    )  # fmt: skip
    found = dict(nights(store))
    assert found[date.fromisoformat(evening)] == hours
    assert sorted(found.values()) == [1, 1, hours]


def test_machines_and_counts(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    store.take(shots("2026-10-05 20:00", failed="no atoms"))
    store.take(shots("2026-10-05 20:01", "2026-10-05 20:02", reference=True, sequence="check"))
    store.take(shots("2026-10-05 20:03", "2026-10-05 20:04", scan="x"))
    store.take(shots("2026-10-05 20:05", machine="egret"))
    frame = store.nights()
    assert list(frame.machine) == ["egret", "heron"]
    row = frame.iloc[1]
    assert (row.shots, row.set_aside, row.references, row.scans, row.sequences) == (5, 1, 2, 1, "check, s")
    assert frame["first"][0].isoformat() == "2026-10-05T18:05:00+00:00", (
        "a machine without a card is shown in UTC"
    )


def test_a_new_card_moves_the_nights_there_are(store: Store, tmp_path: Path) -> None:
    store.take(shots("2026-10-05 13:00"))
    assert nights(store) == [(date(2026, 10, 4), 1)]
    use_card(store, tmp_path)
    assert nights(store) == [(date(2026, 10, 5), 1)]


def every(
    minutes: int, first: str, last: str, zone: str = "Europe/Vienna", **fields: Any
) -> list[dict[str, Any]]:
    """Return shots in regular steps of real time between two local times, both included."""
    begin, end = (
        datetime.fromisoformat(time).replace(tzinfo=ZoneInfo(zone)).timestamp() for time in (first, last)
    )
    return [
        {"machine": "heron", "sequence": "s", "parameters": {"a": at},
         "started": datetime.fromtimestamp(at, ZoneInfo("UTC")).isoformat(), **fields}
        for at in range(int(begin), int(end) + 1, 60 * minutes)
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("boundary", "first", "last", "night"),
    [
        ("12:00", "2026-10-06 11:00", "2026-10-06 13:30", date(2026, 10, 5)),
        ("08:00", "2026-10-06 07:00", "2026-10-06 10:30", date(2026, 10, 5)),
        ("08:00", "2026-10-06 08:00", "2026-10-06 13:30", date(2026, 10, 6)),  # noon is no boundary then
        ("00:00", "2026-10-06 22:00", "2026-10-07 02:00", date(2026, 10, 6)),
        ("12:00", "2026-10-25 10:00", "2026-10-25 13:30", date(2026, 10, 24)),  # clocks went back that night
        ("02:30", "2026-10-25 01:00", "2026-10-25 05:00", date(2026, 10, 24)),  # the boundary comes twice
        ("02:30", "2026-03-29 01:00", "2026-03-29 05:00", date(2026, 3, 28)),  # the boundary is left out
    ],
)
def test_a_session_across_the_boundary_is_of_one_night(
    store: Store, tmp_path: Path, boundary: str, first: str, last: str, night: date
) -> None:
    use_card(store, tmp_path, f'night_boundary = "{boundary}"')
    session = every(10, first, last, scan="x", swept=["a"])
    store.take(session)
    assert nights(store) == [(night, len(session))]
    assert store.nights()["scans"].tolist() == [1]
    moments = [datetime.fromisoformat(shot["started"]) for shot in session]
    assert set(store.night_of(moments)) == {night}


@pytest.mark.parametrize(("minutes", "sessions"), [(59, 1), (61, 2)])
def test_a_pause_of_an_hour_at_the_boundary_parts(
    store: Store, tmp_path: Path, minutes: int, sessions: int
) -> None:
    use_card(store, tmp_path)
    store.take(every(minutes, "2026-10-06 09:30", "2026-10-06 14:00"))
    assert len(nights(store)) == sessions


def test_the_night_of_any_moment_is_that_of_the_table(store: Store, tmp_path: Path) -> None:
    """Also of moments between shots, and of some moments alone: what was not asked for has its say."""
    use_card(store, tmp_path)
    store.take(every(20, "2026-10-05 18:00", "2026-10-06 14:00"))  # runs on past noon
    store.take(every(20, "2026-10-06 19:00", "2026-10-07 11:00"))
    store.take(every(20, "2026-10-07 13:00", "2026-10-07 15:00"))  # after a pause
    frame = store.nights()
    table = dict(zip(frame.night, frame.shots, strict=True))
    every_shot = [at.to_pydatetime() for at in store.shots()["started"]]
    alone = [store.night_of([at])[0] for at in every_shot]
    assert {night: alone.count(night) for night in table} == table
    assert store.night_of(every_shot[::-1]) == alone[::-1]

    def local(text: str) -> datetime:
        return datetime.fromisoformat(text).replace(tzinfo=ZoneInfo("Europe/Vienna"))

    assert store.night_of([local("2026-10-06 13:50"), local("2026-10-06 18:00")]) == [
        date(2026, 10, 5),
        date(2026, 10, 6),
    ]
    assert store.night_of([local("2026-10-06 14:30")]) == [
        date(2026, 10, 5)
    ]  # less than an hour after the last shot
    assert store.night_of([local("2026-10-07 12:30"), local("2030-01-01 01:00")]) == [
        date(2026, 10, 7),
        date(2029, 12, 31),
    ]
    assert store.night_of([]) == []


def test_a_machine_that_never_pauses_has_the_nights_of_the_table(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    store.take(every(30, "2026-10-05 09:00", "2026-10-09 15:00"))
    frame = store.nights()
    shots = [at.to_pydatetime() for at in store.shots()["started"]]
    alone = [store.night_of([at])[0] for at in shots]
    assert {night: alone.count(night) for night in frame.night} == dict(
        zip(frame.night, frame.shots, strict=True)
    )
