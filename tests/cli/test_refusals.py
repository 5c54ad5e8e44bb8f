"""What `take` says where it refuses: many alike as one, sensors taken for shots, machines that come up."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from nightfold_cli.namehint import sensors_hint
from nightfold_cli.plots import Chart, Frame, Label, Points, shading
from nightfold_cli.points import mean_and_scatter
from nightfold_cli.refusals import summarise

SHOT = {"machine": "heron", "sequence": "hold", "parameters": {"a": 1}}


def lines(path: Path, records: list[dict[str, Any]]) -> str:
    path.write_text("".join(json.dumps(record) + "\n" for record in records))
    return path.name


def test_reasons_alike_but_for_the_time_are_one(run: Any, at_home: Path) -> None:
    naive = [{**SHOT, "started": f"2026-10-05T20:00:{k:02d}"} for k in range(40)]
    answer = run("take", "--new", "--store", "s.sqlite", lines(at_home / "a.jsonl", naive))
    (told,) = [line for line in answer.err.splitlines() if "refused a.jsonl" in line]
    assert "lines 1-40 (40): started: found '2026-10-05T20:00:00' and 39 others, wanted an ISO 8601" in told
    assert "naive_times = true" in told
    sensors = [{"machine": "heron", "at": item["started"], "readings": {"room": 20}} for item in naive]
    answer = run("take", "--sensors", "--store", "s.sqlite", lines(at_home / "b.jsonl", sensors))
    assert "refused b.jsonl: lines 1-40 (40): at: found '2026-10-05T20:00:00' and 39 others" in answer.err


def test_few_reasons_stand_by_themselves() -> None:
    refused = [{"source": "a", "line": k, "reason": f"x: found {k}, wanted 9"} for k in range(1, 4)]
    assert len(summarise(refused)) == 3
    whole = [{"source": f"{k}", "line": None, "reason": f"{k} cannot be read"} for k in range(9)]
    assert summarise(whole) == [item["reason"] for item in whole]


@pytest.mark.parametrize("options", [[], ["--machine", "heron", "--sequence", "s", "--observables", "rest"]])
def test_a_table_of_sensors_without_the_option(run: Any, at_home: Path, options: list[str]) -> None:
    (at_home / "room.csv").write_text("at,room [degC]\n2026-10-05T20:00:00Z,20\n")
    answer = run("take", "--new", "--store", "s.sqlite", "room.csv", *options)
    assert "if these are readings of sensors, take them with --sensors" in answer.err


def test_a_machine_that_sensors_made(run: Any, at_home: Path) -> None:
    shot = lines(at_home / "a.jsonl", [{**SHOT, "started": "2026-10-05T20:00:00Z"}])
    run("take", "--new", "--store", "s.sqlite", shot)
    for machine, said in (
        ("roomlog", "roomlog is a new machine, with sensors alone"),
        ("herom", "beside heron"),
    ):
        record = {"machine": machine, "at": "2026-10-05T20:00:00Z", "readings": {"room": 20}}
        name = lines(at_home / f"{machine}.jsonl", [record])
        assert said in run("take", "--sensors", "--store", "s.sqlite", name).err
        assert "new machine" not in run("take", "--sensors", "--store", "s.sqlite", name).err
    assert sensors_hint([], ["heron"]) is None


def test_huge_numbers() -> None:
    mean, scatter = mean_and_scatter([1e308, 1.2e308, 1.4e308])
    assert mean == pytest.approx(1.2e308)
    assert scatter == pytest.approx(0.2e308)
    assert mean_and_scatter([1.0, 2.0, 3.0]) == (2.0, 1.0)
    chart = Chart(Points([-1e308, 0.0, 1e308], [1.0, 2.0, 3.0]), Label("a"), Label("n"))
    assert chart.lines() == [[("(numbers too far apart to draw)", "label")]]
    assert chart.residuals([1.0, 2.0, 3.0], "residuals") == []
    assert shading([[-1.7e308, 0.0, 1.7e308]]) == ["  ▒▒██"]


def test_points_at_one_place_have_the_axis_asked_for_around_them() -> None:
    frame = Chart(Points([1.8e9], [20.0]), Label("time"), Label("room"), around=1800.0).frame()
    assert frame == Frame(1.8e9 - 1800, 1.8e9 + 1800, 19.0, 21.0)


def test_scans_of_huge_values(in_a_process: Any, at_home: Path) -> None:
    values = [1e308, -1e308, 0.0, 5e307] * 3
    name = lines(
        at_home / "a.jsonl",
        [
            {
                "machine": "heron", "sequence": "hold", "started": f"2026-10-05T20:00:{k:02d}Z", "scan": "x",
                "swept": ["a"], "parameters": {"a": value}, "observables": {"n": value},
            }
            for k, value in enumerate(values)
        ],
    )  # fmt: skip
    for command in (["take", "--new", name], ["scans"], ["scan", "x"], ["nights"]):
        answer = in_a_process(*command, "--store", "s.sqlite")
        assert (answer.code, "Warning" in answer.err) == (0, False), answer.err
