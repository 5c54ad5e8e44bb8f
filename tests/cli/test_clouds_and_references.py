"""Screens of scans with several clouds, and of readings relative to reference shots."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
import xarray as xr

from nightfold import open_store
from nightfold.scans.netcdf import read_netcdf

Show = Callable[..., str]
Run = Callable[..., Any]
START = datetime(2026, 11, 3, 20, tzinfo=UTC)
NAMES = ("atom_number[down]", "atom_number[up]")


def records() -> list[dict[str, Any]]:
    """Return a transfer between two states while the machine loses 2 % of its atoms from shot to shot."""
    made = []
    for place in range(16):
        reference = place % 5 == 0
        share = 0.1 if reference else (0.2 if place < 6 else 0.8 if place < 11 else 0.3)
        atoms = 1000.0 * (1 - 0.02 * place)
        values = (atoms * (1 - share), atoms * share)
        own = {"reference": True} if reference else {"scan": "rf", "swept": ["rf_frequency"]}
        made.append(
            {
                "uid": f"shot-{place:02d}",
                "machine": "osprey",
                "started": (START + timedelta(seconds=20 * place)).isoformat(),
                "sequence": "rf-spectroscopy",
                "parameters": {"rf_frequency": {"value": 80 + 0.01 * place, "unit": "MHz"}},
                "observables": {
                    name: {"value": value, "stderr": 0.01 * value, "unit": "atoms"}
                    for name, value in zip(NAMES, values, strict=True)
                },
                "frames": [
                    {"camera": camera, "role": "atoms", "path": f"{camera}-{place}.tif"}
                    for camera in ("side", "top")
                ],
                **own,
            }
        )
    return made


@pytest.fixture
def where(at_home: Path) -> Path:
    with open_store(at_home / "two.sqlite", create=True) as store:
        assert not store.take(records()).refused
    return at_home / "two.sqlite"


@pytest.mark.parametrize("width", [80, 120])
def test_clouds_stand_in_one_chart_told_apart_by_their_marks(
    where: Path, on_screen: Show, width: int
) -> None:
    text = on_screen("--store", where, "scan", "rf", width=width)
    assert "\natom_number (" in text
    chart = text.split("\natom_number (")[1].split("rf_frequency (MHz)")[0]
    assert (chart.count("●"), chart.count("○")) == (12, 12)
    assert "● atom_number[down], ○ atom_number[up], │ and ╎ one stderr either way" in text
    assert "next: nightfold fit rf#1 MODEL -o 'atom_number[down]'" in text
    assert max(map(len, text.split("\n")[1:])) <= width


def test_one_cloud_alone(where: Path, on_screen: Show) -> None:
    text = on_screen("--store", where, "scan", "rf", "-o", NAMES[1])
    assert "\natom_number[up] (" in text
    assert "○" not in text
    assert "● mean, │ one stderr either way" in text
    assert "○" in on_screen("--store", where, "scan", "rf", "-o", "atom_number")


def test_a_fit_wants_one_cloud_named(where: Path, run: Run) -> None:
    for asked in ((), ("-o", "atom_number")):
        answer = run("--store", where, "fit", "rf", "gaussian", *asked)
        assert answer.code == 2
        assert "name one: -o 'atom_number[down]' or -o 'atom_number[up]'" in answer.err
    answer = run("--store", where, "fit", "rf", "gaussian", "-o", NAMES[1], "--json")
    assert json.loads(answer.out)["fits"][0]["observable"] == NAMES[1]
    assert run("--store", where, "scan", "rf", "-o", "atom_number[left]").code == 3


@pytest.mark.parametrize("width", [80, 120])
def test_a_scan_relative_to_reference_shots(where: Path, on_screen: Show, width: int) -> None:
    text = on_screen(
        "--store", where, "scan", "rf", "-o", NAMES[1], "--relative-to", "reference", width=width
    )
    head = " ".join(text.split("atom_number[up]")[0].split())
    assert "relative to 4 reference shots of rf-spectroscopy, every shot within 40 s of one" in head
    assert "atom_number[up] (relative to reference)" in text
    assert NAMES[0] not in text
    assert max(map(len, text.split("\n")[1:])) <= width


def test_relative_numbers_in_json(where: Path, run: Run) -> None:
    answer = json.loads(run("--store", where, "scan", "rf", "--relative-to", "reference", "--json").out)
    means = [point["observables"][NAMES[1]]["mean"] for point in answer["points"]]
    assert means == pytest.approx([2.0] * 4 + [8.0] * 4 + [3.0] * 4)  # the loss is gone
    assert answer["relative"]["reference_shots"] == 4
    assert answer["relative"]["reference_distance_s"] == 40.0
    plain = json.loads(run("--store", where, "scan", "rf", "--json").out)
    assert plain["relative"] is None


def test_reference_shots_too_far(where: Path, run: Run) -> None:
    answer = run("--store", where, "scan", "rf", "--relative-to", "reference", "--reference-within", "20")
    assert (answer.code, answer.out) == (3, "")
    assert (
        "6 of 12 shots have no reference shot within 20 s, the worst has its nearest 40 s away" in answer.err
    )
    assert "(--reference-within)" in answer.err
    wrong = run("--store", where, "scan", "rf", "--relative-to", "reference", "--reference-within", "soon")
    assert (wrong.code, "wanted a time such as '30 min'" in wrong.err) == (2, True)


def test_a_relative_fit_is_shown_as_such(where: Path, run: Run, on_screen: Show) -> None:
    arguments = ("fit", "rf", "gaussian", "-o", NAMES[1], "--relative-to", "reference")
    fit = json.loads(run("--store", where, *arguments, "--json").out)["fits"][0]
    assert fit["relative_to"] == "reference"
    assert fit["estimates"]["amplitude"]["unit"] == ""
    (kept,) = json.loads(run("--store", where, "fits", "--json").out)["fits"]
    assert kept["relative_to"] == "reference"
    plain = json.loads(run("--store", where, *arguments[:-2], "--json").out)["fits"][0]
    assert plain["shared_stderr"] == {}
    assert "atom_number[up] relative to reference shots along rf_frequency" in on_screen(
        "--store", where, *arguments
    )
    assert "relative to reference" in on_screen("--store", where, "fits", width=120)
    assert 0 < fit["shared_stderr"]["offset"] < fit["estimates"]["offset"]["stderr"]
    assert kept["shared_stderr"] == fit["shared_stderr"]
    shown = " ".join(on_screen("--store", where, *arguments).split())
    assert (
        "of the stderr, due to reference shots: center 1.5e-4, fwhm 1.3e-4, amplitude 0.057, offset" in shown
    )


def test_exports(where: Path, at_home: Path, run: Run) -> None:
    assert run("--store", where, "export", "rf", "plain.nc").code == 0
    assert run("--store", where, "export", "rf", "ratio.nc", "--relative-to", "reference").code == 0
    with open_store(where) as store:
        xr.testing.assert_identical(read_netcdf(at_home / "plain.nc"), store.scan("rf").dataset())
        ratio = store.scan("rf").dataset(relative_to="reference")
        xr.testing.assert_identical(read_netcdf(at_home / "ratio.nc"), ratio)
    relative = ("-o", NAMES[1], "--relative-to", "reference")
    assert run("--store", where, "export", "rf", "ratio.csv", *relative).code == 0
    with (at_home / "ratio.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert float(rows[0]["atom_number_relative[up]"]) == pytest.approx(2)
    assert float(rows[0]["atom_number_reference[up] [atoms]"]) == pytest.approx(98)
    assert not any(
        name.startswith("atom_number[") for name in rows[0]
    )  # a ratio is never taken for the reading


def test_frames_of_two_cameras_are_shown(where: Path, on_screen: Show, run: Run) -> None:
    frames = json.loads(run("--store", where, "shots", "shot-01", "--json").out)["shot"]["frames"]
    assert [frame["path"] for frame in frames] == ["side-1.tif", "top-1.tif"]
    text = on_screen("--store", where, "shots", "shot-01")
    assert "frame side" in text
    assert "frame top" in text
