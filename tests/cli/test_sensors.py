"""`nightfold sensors`, `take --sensors` and `shots --sensor`: what people see, what pipes get, JSON."""

from __future__ import annotations

import json
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from nightfold.opening import create_store
from nightfold_cli.dateticks import date_ticks

START = datetime(2026, 10, 5, 18, 0, tzinfo=UTC)
CARD = """\
machine = "heron"
zone = "Europe/Vienna"
[sensors.room]
unit = "degC"
range = [20, 22]
description = "beside the optical table"
"""


@pytest.fixture
def folder(at_home: Path) -> Path:
    """Return the working folder, with a store `nightfold.sqlite` of 20 shots and readings of two sensors to take."""
    (at_home / "heron.toml").write_text(CARD, encoding="utf-8")
    with create_store(at_home / "nightfold.sqlite") as store:
        store.use_card(at_home / "heron.toml")
        store.take(
            {
                "machine": "heron",
                "uid": f"shot-{k:02d}",
                "started": (START + timedelta(seconds=10 * k)).isoformat(),
                "sequence": "hold",
                "parameters": {"bias": 1.0},
            }
            for k in range(20)
        )
    rows = ["at,room [degC],pressure [mbar]"]
    for k in range(0, 7200, 5):
        at = (START + timedelta(seconds=k)).isoformat()
        rows.append(f"{at},{20 + k / 3600:.3f},{3e-11 if k % 2 else ''}")
    (at_home / "room.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    return at_home


def test_take_sensors_counts_readings_and_refuses_lines(run: Callable[..., Any], folder: Path) -> None:
    answer = run("take", "--sensors", "room.csv", "--json")
    assert answer.code == 0
    assert json.loads(answer.out) == {"schema": 1, "new": 1440 + 720, "known": 0, "amended": 0, "refused": []}
    (folder / "bad.jsonl").write_text('{"machine": "heron"}\n{"machine": "heron"}\n', encoding="utf-8")
    answer = run("take", "--sensors", "room.csv", "bad.jsonl", "none.csv")
    assert answer.code == 5
    assert answer.out.splitlines() == [
        "file\tnew\tknown\tamended\trefused",
        "room.csv\t0\t2160\t0\t0",
        "bad.jsonl\t0\t0\t0\t2",
    ]
    assert "refused bad.jsonl: lines 1-2 (2): at: found nothing" in answer.err
    assert "2 refused, 2160 readings kept; mend the refused ones" in answer.err
    assert "none.csv: there is no such file" in answer.err


def test_options_of_shots_are_not_for_sensors(run: Callable[..., Any], folder: Path) -> None:
    answer = run("take", "--sensors", "room.csv", "--swept", "a")
    assert answer.code == 2
    assert "--swept is for shots; --sensors takes readings that belong to none" in answer.err
    renamed = (folder / "room.csv").read_text(encoding="utf-8").replace("at,", "time;", 1).replace(",", ";")
    (folder / "other.csv").write_text(renamed, encoding="utf-8")
    assert run("take", "--sensors", "other.csv").code == 2
    assert run("take", "--sensors", "other.csv", "--started", "time", "--delimiter", ";").code == 0


def test_the_list(run: Callable[..., Any], on_screen: Callable[..., str], folder: Path) -> None:
    answer = run("sensors")
    assert answer.code == 0
    assert "no sensors yet; 'nightfold take --sensors FILE…' takes readings in" in answer.err
    run("take", "--sensors", "room.csv")
    assert run("sensors").out.splitlines()[2] == (
        "room\tdegC\t1440\t2026-10-05T20:00:00+02:00\t2026-10-05T21:59:55+02:00\t21.999\tin range"
    )
    listed = json.loads(run("sensors", "--json").out)["sensors"]
    assert listed[1] == {
        "machine": "heron",
        "name": "room",
        "unit": "degC",
        "readings": 1440,
        "first": "2026-10-05T18:00:00+00:00",
        "last": "2026-10-05T19:59:55+00:00",
        "newest": 21.999,
        "range": [20.0, 22.0],
        "in_range": True,
    }
    assert listed[0]["range"] is None
    assert on_screen("sensors").split("\n")[1:] == [
        "",
        "sensor    unit  readings  first        last         newest  range",
        "pressure  mbar       720  10-05 20:00  10-05 21:59   3e-11",
        "room      degC      1440  10-05 20:00  10-05 21:59  21.999  in range",
        "times in Europe/Vienna",
        "",
    ]


@pytest.mark.parametrize(
    ("value", "mark"), [(25.0, "! above 22"), (3.0, "! below 20"), (float("nan"), "! no number")]
)
def test_a_newest_value_that_is_not_plausible_is_marked(
    on_screen: Callable[..., str], folder: Path, value: float, mark: str
) -> None:
    line = {"machine": "heron", "at": START.isoformat(), "readings": {"room": value}}
    (folder / "room.jsonl").write_text(json.dumps(line) + "\n", encoding="utf-8")
    on_screen("take", "--sensors", "room.jsonl")
    assert on_screen("sensors").split("\n")[3].endswith(mark)


@pytest.mark.parametrize("width", [80, 120])
def test_the_chart(run: Callable[..., Any], on_screen: Callable[..., str], folder: Path, width: int) -> None:
    run("take", "--sensors", "room.csv")
    lines = on_screen("sensors", "room", width=width).split("\n")
    assert lines[2] == "room  beside the optical table"
    assert lines[3] == "room (degC)"
    assert all(len(line) <= width for line in lines[1:])
    text = "\n".join(lines)
    marks = [(k, line.index("●")) for k, line in enumerate(lines) if "●" in line and "mean" not in line]
    assert [column for _, column in marks] == sorted((c for _, c in marks), reverse=True)  # it rises
    assert "20:30" in text
    assert "time (Europe/Vienna)" in text
    assert "  lowest    20 degC, in the bin from 2026-10-05 20:00:00 CEST" in text
    assert "  mean      20.9993 degC" in text
    assert "bins reach outside" in text
    assert "no readings in that time" in on_screen("sensors", "room", "--since", "2030-01-01")


def test_bins_in_a_pipe_and_as_json(run: Callable[..., Any], folder: Path) -> None:
    run("take", "--sensors", "room.csv")
    head, line, *_ = run("sensors", "room", "--since", "2026-10-05T21:00").out.splitlines()
    assert head == "at\treadings\tlow\tmean\thigh"
    assert line.startswith("2026-10-05T21:00:00+02:00\t")
    answer = json.loads(run("sensors", "room", "--json").out)
    assert {key: answer[key] for key in ("sensor", "machine", "unit", "range", "width_s")} == {
        "sensor": "room", "machine": "heron", "unit": "degC", "range": [20.0, 22.0], "width_s": 120.0,
    }  # fmt: skip
    first = answer["bins"][0]
    assert first.pop("mean") == pytest.approx(sum(round(20 + k / 720, 3) for k in range(24)) / 24, abs=1e-9)
    assert first == {"at": "2026-10-05T18:00:00+00:00", "readings": 24, "low": 20.0, "high": 20.032}
    assert run("sensors", "rom").code == 3
    assert run("sensors", "--since", "2026-10-05").code == 2


def test_shots_with_a_sensor(run: Callable[..., Any], on_screen: Callable[..., str], folder: Path) -> None:
    run("take", "--sensors", "room.csv")
    shots = json.loads(run("shots", "--sensor", "room", "--json").out)
    assert [shot["room"] for shot in shots["shots"][:3]] == [20.0, 20.003, 20.006]
    assert shots["units"] == {"room": "degC"}
    mean = json.loads(run("shots", "--sensor", "room", "--align", "mean", "--limit", "1", "--json").out)
    assert mean["shots"][0]["room"] == pytest.approx((20.053 + 20.054) / 2, abs=1e-9)
    assert "room (degC)" in on_screen("shots", "--sensor", "room")
    answer = run("shots", "--align", "mean")
    assert answer.code == 2
    assert "name one with --sensor" in answer.err


@pytest.mark.parametrize(
    ("begin", "seconds", "labels"),
    [
        ("2026-10-05T20:00+02:00", 10, "20:00:00 20:00:02 20:00:04 20:00:06 20:00:08 20:00:10"),
        ("2026-10-05T20:00+02:00", 7200, "20:00 20:30 21:00 21:30 22:00"),
        ("2026-10-25T01:00+02:00", 9000, "01:00 01:30 02:00 02:30 02:00 02:30"),
        ("2026-10-25T00:00+02:00", 82800, "00:00 06:00 12:00 18:00"),
        ("2026-03-29T00:00+01:00", 18000, "00:00 01:00 03:00 04:00 05:00 06:00"),
        (
            "2026-10-05T20:00+02:00",
            43200,
            "10-05 20:00 10-05 22:00 10-06 00:00 10-06 02:00 10-06 04:00 10-06 06:00 10-06 08:00",
        ),
        ("2026-10-21T00:00+02:00", 9 * 86400, "10-21 10-23 10-25 10-27 10-29"),
        ("2026-02-01T01:00+01:00", 300 * 86400, "2026-03 2026-05 2026-07 2026-09 2026-11"),
        ("2016-02-01T01:00+01:00", 3650 * 86400, "2018-01 2020-01 2022-01 2024-01 2026-01"),
    ],
)
def test_ticks_at_round_local_times(begin: str, seconds: float, labels: str) -> None:
    low = datetime.fromisoformat(begin).timestamp()
    ticks = date_ticks(ZoneInfo("Europe/Vienna"))(low, low + seconds, 6)
    assert " ".join(ticks.labels) == labels
    assert list(ticks.positions) == sorted(ticks.positions)
    assert all(low <= at <= low + seconds for at in ticks.positions)
