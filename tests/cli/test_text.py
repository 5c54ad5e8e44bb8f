from __future__ import annotations

import io
import json
import math
from datetime import UTC, datetime
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pytest

from nightfold_cli.jsonout import document
from nightfold_cli.localtimes import LocalTimes, compact, heading, parse_moment
from nightfold_cli.points import points_of
from nightfold_cli.printable import printable
from nightfold_cli.progress import Progress

VIENNA = ZoneInfo("Europe/Vienna")


def test_json_knows_no_nan_and_no_numpy() -> None:
    answer = {
        "nan": math.nan,
        "number": np.float64(1.5),
        "count": np.int64(3),
        "array": np.array([1.0, math.inf]),
        "truth": np.bool_(True),
        "at": pd.Timestamp("2026-10-05T21:14:03+02:00"),
        "never": pd.NaT,
        "day": datetime(2026, 10, 5, tzinfo=VIENNA).date(),
        "names": ("a", "ü"),
    }
    assert json.loads(document(answer)) == {
        "schema": 1,
        "nan": None,
        "number": 1.5,
        "count": 3,
        "array": [1.0, None],
        "truth": True,
        "at": "2026-10-05T19:14:03+00:00",
        "never": None,
        "day": "2026-10-05",
        "names": ["a", "ü"],
    }


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("loss coarse", "loss coarse"),
        ("\x1b[2J", "\\x1b[2J"),
        ("a\tb\nc", "a\\tb\\nc"),
        ("\u202eabc", "\\u202eabc"),
        ("naïve 🙂", "naïve 🙂"),
        ("a\u00a0b", "a b"),
        ("\udcff", "\\udcff"),
    ],
)
def test_control_characters_are_shown(text: str, shown: str) -> None:
    assert printable(text) == shown


def test_times_are_local_with_the_zone_named() -> None:
    times = LocalTimes({"heron": "Europe/Vienna"})
    at = datetime(2026, 10, 5, 19, 14, 3, tzinfo=UTC)
    assert times.full(at, "heron") == "2026-10-05 21:14:03 CEST"
    assert times.stamp(pd.Timestamp(at), "heron") == "2026-10-05T21:14:03+02:00"
    assert times.full(at, "egret") == "2026-10-05 19:14:03 UTC"
    assert times.note(["heron"]) == "times in Europe/Vienna"
    assert times.note([None]) == "times in Europe/Vienna"
    assert times.note(["heron", "egret"]) == "times local to each machine: Europe/Vienna, UTC"


def test_the_year_is_shown_once_where_it_can() -> None:
    new_year = [datetime(2026, 12, 31, 23, tzinfo=VIENNA), datetime(2027, 1, 1, 1, tzinfo=VIENNA)]
    assert compact(new_year) == ["2026-12-31 23:00", "2027-01-01 01:00"]
    assert heading(new_year) == "when"
    assert compact(new_year[:1]) == ["12-31 23:00"]
    assert heading(new_year[:1]) == "when (2026)"


def test_typed_times_are_local_unless_they_say_otherwise() -> None:
    assert parse_moment("2026-10-05", VIENNA).isoformat() == "2026-10-05T00:00:00+02:00"
    assert parse_moment("2026-10-05T21:14Z", VIENNA).isoformat() == "2026-10-05T21:14:00+00:00"
    with pytest.raises(ValueError, match="found 'yesterday', wanted a day or a time"):
        parse_moment("yesterday", VIENNA)


def test_points_average_repeats() -> None:
    table = pd.DataFrame(
        {
            "field": [2.0, 1.0, 1.0 + 1e-9, 2.0, np.nan],
            "n": [10.0, 4.0, 6.0, np.nan, 1.0],
            "n_stderr": [0.5, 0.1, 0.1, 0.1, 0.1],
        }
    )
    first, second = points_of(table, ["field"], ["n"])
    assert (first.at, first.shots, second.shots) == ((1.0,), 2, 2)
    reading = first.readings["n"]
    assert (reading.count, reading.mean) == (2, 5.0)
    assert reading.scatter == pytest.approx(math.sqrt(2))
    assert reading.stderr == pytest.approx(1.0)
    alone = second.readings["n"]
    assert (alone.count, alone.mean, alone.stderr) == (1, 10.0, 0.5)
    assert math.isnan(alone.scatter)


def test_points_of_words() -> None:
    table = pd.DataFrame({"axis": ["y", "x", "y"], "on": [True, False, True], "n": [1.0, 2.0, 3.0]})
    points = points_of(table, ["axis", "on"], ["n"])
    assert [point.at for point in points] == [("x", False), ("y", True)]


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_quick_work_says_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = Terminal()
    with Progress("taking", 10, stream) as progress:
        progress(5)
    assert stream.getvalue() == ""


@pytest.mark.parametrize("terminal", [True, False])
def test_long_work_says_how_far_it_is(terminal: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    clock = iter([0.0, 0.5, 2.0, 2.01, 30.0])
    monkeypatch.setattr("nightfold_cli.progress.time.monotonic", lambda: next(clock))
    stream = Terminal() if terminal else io.StringIO()
    with Progress("taking", 10, stream) as progress:
        for done in (1, 5, 6, 9):
            progress(done)
    written = stream.getvalue()
    if terminal:
        assert written.startswith("\rtaking …  50%, 2 s left\rtaking …  90%, 3 s left")
        assert written.endswith("\r")
    else:
        assert written == "taking …  50%, 2 s left\ntaking …  90%, 3 s left\n"


def test_times_of_a_night_with_a_clock_change_show_their_offset() -> None:
    zone = ZoneInfo("Europe/Vienna")
    first = datetime(2026, 10, 25, 0, 30, tzinfo=UTC).astimezone(zone)
    again = datetime(2026, 10, 25, 1, 30, tzinfo=UTC).astimezone(zone)
    before = datetime(2026, 10, 24, 8, 0, tzinfo=UTC).astimezone(zone)
    after = datetime(2026, 10, 25, 11, 30, tzinfo=UTC).astimezone(zone)
    assert compact([before, first, again, after]) == [
        "10-24 10:00",
        "10-25 02:30 +02:00",
        "10-25 02:30 +01:00",
        "10-25 12:30",
    ]
    assert compact([first], seconds=True) == ["10-25 02:30:00 +02:00"]
