"""Times: read, placed in zones, cut into nights."""

from __future__ import annotations

from datetime import UTC, date, datetime, time, timedelta, timezone
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.errors import NotFound
from nightfold.ledger.selecting import moment_us
from nightfold.timestamps import (
    find_zone,
    from_us,
    local_times,
    nights_of,
    parse_moment,
    to_us,
    utc_times,
)

VIENNA = ZoneInfo("Europe/Vienna")


@pytest.mark.parametrize(
    ("text", "utc"),
    [
        ("2026-10-05T21:14:03.250+02:00", "2026-10-05T19:14:03.250000+00:00"),
        ("2026-10-05T21:14:03Z", "2026-10-05T21:14:03+00:00"),
        ("2026-10-05 21:14:03-0330", "2026-10-06T00:44:03+00:00"),
        ("2026-10-05T21:14+05:45", "2026-10-05T15:29:00+00:00"),
        ("2026-10-05T21:14:03.123456789+00:00", "2026-10-05T21:14:03.123456+00:00"),
        ("1900-01-01T00:00:00Z", "1900-01-01T00:00:00+00:00"),
    ],
)
def test_times_with_an_offset(text: str, utc: str) -> None:
    assert from_us(parse_moment(text)).isoformat() == utc


@pytest.mark.parametrize(
    "text", ["", "now", "2026-10-05", "20261005", "2026-10-05T", "2026-10-05T25:00Z", "2026-10-05T21:14:60Z",
             "05.10.2026 21:14", "2026-10-05T21:14:03", "1791234567", "2026-10-05T21:14:03+25:00"],
)  # fmt: skip
def test_what_is_no_time(text: str) -> None:
    with pytest.raises(ValueError, match="an ISO 8601 time with an offset"):
        parse_moment(text)


@pytest.mark.parametrize(
    "text", ["1899-12-31T23:59:59Z", "2200-01-01T00:00:00Z", "0001-01-01T00:00:00+23:59"]
)
def test_times_far_away(text: str) -> None:
    with pytest.raises(ValueError, match="between the years 1900 and 2200"):
        parse_moment(text)


@given(st.datetimes(datetime(1900, 1, 2), datetime(2199, 12, 30)), st.integers(-14 * 60, 14 * 60))
def test_microseconds_are_exact(moment: datetime, offset: int) -> None:
    aware = moment.replace(tzinfo=timezone(timedelta(minutes=offset)))
    us = to_us(aware)
    assert from_us(us) == aware
    assert parse_moment(aware) == parse_moment(aware.isoformat()) == us
    assert utc_times(np.array([us]))[0].to_pydatetime() == aware


# ---------------------------------------------------------------- outside check: the IANA database
# Source: the IANA time zone database (https://www.iana.org/time-zones), by Python's zoneinfo, and clock changes as that
# database states them in words: Vienna 2026-03-29 and 2026-10-25, New York 2026-03-08 and 2026-11-01 (rule US),
# Lord Howe 2026-04-05 and 2026-10-04 (half an hour), Apia 2011-12-30 (a whole day left out), Casablanca 2026-02-15.


@pytest.mark.parametrize(
    ("zone", "text", "what"),
    [
        ("Europe/Vienna", "2026-03-29T02:00:00", "leave this hour out"),
        ("Europe/Vienna", "2026-03-29T02:59:59", "leave this hour out"),
        ("Europe/Vienna", "2026-10-25T02:00:00", "show this hour twice"),
        ("Europe/Vienna", "2026-10-25T02:59:59", "show this hour twice"),
        ("America/New_York", "2026-03-08T02:30:00", "leave this hour out"),
        ("America/New_York", "2026-11-01T01:30:00", "show this hour twice"),
        ("Australia/Lord_Howe", "2026-10-04T02:15:00", "leave this hour out"),
        ("Australia/Lord_Howe", "2026-04-05T01:45:00", "show this hour twice"),
        ("Pacific/Apia", "2011-12-30T12:00:00", "leave this hour out"),
        ("Africa/Casablanca", "2026-02-15T02:30:00", "show this hour twice"),
        ("Asia/Beirut", "2026-03-29T00:30:00", "leave this hour out"),
    ],
)
def test_hours_left_out_and_repeated(zone: str, text: str, what: str) -> None:
    with pytest.raises(ValueError, match=f"the clocks of {zone} {what}"):
        parse_moment(text, ZoneInfo(zone))


@pytest.mark.parametrize(
    ("zone", "text", "utc"),
    [
        ("Europe/Vienna", "2026-03-29T01:59:59", "2026-03-29T00:59:59"),
        ("Europe/Vienna", "2026-03-29T03:00:00", "2026-03-29T01:00:00"),
        ("Europe/Vienna", "2026-10-25T01:59:59", "2026-10-24T23:59:59"),
        ("Europe/Vienna", "2026-10-25T03:00:00", "2026-10-25T02:00:00"),
        ("Asia/Kathmandu", "2026-06-01T00:00:00", "2026-05-31T18:15:00"),
        ("Australia/Lord_Howe", "2026-10-04T02:30:00", "2026-10-03T15:30:00"),
        ("Pacific/Apia", "2011-12-31T00:00:00", "2011-12-30T10:00:00"),
        ("America/New_York", "2026-11-01T02:00:00", "2026-11-01T07:00:00"),
    ],
)
def test_the_seconds_around_them(zone: str, text: str, utc: str) -> None:
    assert from_us(parse_moment(text, ZoneInfo(zone))).isoformat() == f"{utc}+00:00"


ZONES = [
    "Europe/Vienna",
    "America/New_York",
    "Australia/Lord_Howe",
    "America/St_Johns",
    "Asia/Kolkata",
    "Africa/Cairo",
]


@settings(max_examples=150)
@given(st.sampled_from(ZONES), st.datetimes(datetime(1990, 1, 1), datetime(2036, 1, 1)))
def test_every_local_time_is_placed_as_the_database_has_it(zone: str, local: datetime) -> None:
    """Independent of offsets before and after: which UTC minutes show this local time at all."""
    where = ZoneInfo(zone)
    local = local.replace(second=0, microsecond=0)
    near = datetime(local.year, local.month, local.day, local.hour, local.minute, tzinfo=UTC)
    shown = [
        moment
        for quarter in range(-14 * 4, 14 * 4 + 1)
        if (moment := near + timedelta(minutes=15 * quarter)).astimezone(where).replace(tzinfo=None) == local
    ]
    if len(shown) == 1:
        assert from_us(parse_moment(local.isoformat(), where)) == shown[0]
    else:
        with pytest.raises(ValueError, match="twice" if shown else "leave this hour out"):
            parse_moment(local.isoformat(), where)


def test_unknown_zones() -> None:
    for name in ("Europe/Wien", "", "../etc/passwd", "x\0", "/etc/localtime"):
        with pytest.raises(NotFound, match="wanted an IANA name"):
            find_zone(name)


# ---------------------------------------------------------------- nights


@pytest.mark.parametrize(
    ("utc", "zone", "boundary", "night"),
    [
        ("2026-10-05T09:59:59", "Europe/Vienna", time(12), date(2026, 10, 4)),
        ("2026-10-05T10:00:00", "Europe/Vienna", time(12), date(2026, 10, 5)),
        ("2026-10-06T09:59:59", "Europe/Vienna", time(12), date(2026, 10, 5)),
        ("2026-10-25T10:59:59", "Europe/Vienna", time(12), date(2026, 10, 24)),
        ("2026-10-25T11:00:00", "Europe/Vienna", time(12), date(2026, 10, 25)),
        ("2026-03-28T11:00:00", "Europe/Vienna", time(12), date(2026, 3, 28)),
        ("2026-03-29T09:59:59", "Europe/Vienna", time(12), date(2026, 3, 28)),
        ("2026-03-29T10:00:00", "Europe/Vienna", time(12), date(2026, 3, 29)),
        ("2026-10-05T05:59:00", "Europe/Vienna", time(8), date(2026, 10, 4)),
        ("2026-10-05T06:00:00", "Europe/Vienna", time(8), date(2026, 10, 5)),
        ("2026-10-05T00:00:00", "UTC", time(0), date(2026, 10, 5)),
        ("2026-10-25T00:29:59", "Europe/Vienna", time(2, 30), date(2026, 10, 24)),
        ("2026-10-25T00:30:00", "Europe/Vienna", time(2, 30), date(2026, 10, 25)),  # 02:30 for the first time
        ("2026-10-25T01:15:00", "Europe/Vienna", time(2, 30), date(2026, 10, 25)),  # 02:15 once more
        ("2026-03-29T00:59:59", "Europe/Vienna", time(2, 30), date(2026, 3, 28)),
        ("2026-03-29T01:00:00", "Europe/Vienna", time(2, 30), date(2026, 3, 29)),  # 03:00, there is no 02:30
        ("2026-10-05T16:29:59", "America/New_York", time(12, 30), date(2026, 10, 4)),
        ("2026-10-05T16:30:00", "America/New_York", time(12, 30), date(2026, 10, 5)),
    ],
)
def test_the_night_of_a_moment(utc: str, zone: str, boundary: time, night: date) -> None:
    us = parse_moment(f"{utc}Z")
    assert list(nights_of(np.array([us]), zone, boundary)) == [night]


def test_local_times() -> None:
    us = parse_moment("2026-10-25T00:30:00Z")
    assert [
        moment.isoformat() for moment in local_times(np.array([us, us + 3_600_000_000]), "Europe/Vienna")
    ] == [
        "2026-10-25T02:30:00+02:00",
        "2026-10-25T02:30:00+01:00",
    ]


# ---------------------------------------------------------------- as filters


@pytest.mark.parametrize(
    ("text", "zone", "utc"),
    [
        ("2026-10-05", "Europe/Vienna", "2026-10-04T22:00:00"),
        ("2026-10-05T21:00", "Europe/Vienna", "2026-10-05T19:00:00"),
        ("2026-10-05T21:00Z", "Europe/Vienna", "2026-10-05T21:00:00"),
        ("2026-03-29", "Asia/Beirut", "2026-03-28T22:00:00"),
        ("2026-11-01", "America/Havana", "2026-11-01T04:00:00"),
        ("2011-12-30", "Pacific/Apia", "2011-12-30T10:00:00"),
    ],
)
def test_since_and_until(text: str, zone: str, utc: str) -> None:
    """A date is its first moment, also where the clocks leave midnight out or show it twice (IANA database)."""
    assert from_us(moment_us(text, zone)).isoformat() == f"{utc}+00:00"


def test_since_as_a_datetime() -> None:
    assert (
        from_us(moment_us(datetime(2026, 10, 5, 21), "Europe/Vienna")).isoformat()
        == "2026-10-05T19:00:00+00:00"
    )
    assert moment_us(datetime(2026, 10, 5, 21, tzinfo=VIENNA), "UTC") == parse_moment("2026-10-05T19:00Z")
    for bad in ("yesterday", "2026-13-05", "2026-10-5", "2026-03-29T02:30"):
        with pytest.raises(NotFound, match=r"time '.*': wanted"):
            moment_us(bad, "Europe/Vienna")
