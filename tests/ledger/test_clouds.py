"""Clouds, cameras, two species: how they are taken and what they share."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
import xarray as xr

from nightfold import Store, open_store
from nightfold.card import parse_card
from nightfold.errors import CardError
from nightfold.intake.csvcolumns import CsvColumns
from nightfold.scans.netcdf import read_netcdf, write_netcdf

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
ODD = ["|F=1,mF=-1>", "F=2, mF=+2", "upper left", "λ/2", "87Rb"]


def shot(number: int, observables: dict[str, Any], **fields: Any) -> dict[str, Any]:
    return {
        "uid": f"shot-{number}",
        "machine": "heron",
        "started": (START + timedelta(seconds=15 * number)).isoformat(),
        "sequence": "split",
        "scan": "split",
        "swept": ["pulse"],
        "parameters": {"pulse": {"value": 10.0 * (number % 3), "unit": "us"}},
        "observables": observables,
        **fields,
    }


@pytest.fixture
def here(anywhere: str) -> Iterator[Store]:
    with open_store(anywhere) as opened:
        yield opened


def take(store: Store, *observables: dict[str, Any]) -> None:
    refused = store.take([shot(k, each) for k, each in enumerate(observables)]).refused
    assert not refused, refused


def use_card(store: Store, folder: Path, text: str) -> None:
    path = folder / "heron.toml"
    path.write_text(text, encoding="utf-8")
    store.use_card(path)


def readings(store: Store, number: int) -> dict[str, tuple[float, str]]:
    return {name: (each.value, each.unit) for name, each in store.shot(f"shot-{number}").observables.items()}


def test_the_first_unit_stated_for_one_cloud_is_that_of_all(here: Store) -> None:
    take(
        here,
        {"temperature[up]": 400, "temperature[down]": 300},
        {"temperature[up]": {"value": 410, "unit": "nK"}, "temperature[down]": 310},
        {"temperature[left]": 320, "temperature": {"value": 0.33, "unit": "uK"}},
        {"temperature[down]": {"value": 0.34, "unit": "uK", "stderr": 0.01}},
    )
    assert readings(here, 0) == {"temperature[up]": (400, "nK"), "temperature[down]": (300, "nK")}
    assert readings(here, 1) == {"temperature[up]": (410, "nK"), "temperature[down]": (310, "nK")}
    assert readings(here, 2) == {"temperature[left]": (320, "nK"), "temperature": (330, "nK")}
    assert readings(here, 3) == {"temperature[down]": (340, "nK")}
    refused = here.take([shot(9, {"temperature[right]": {"value": 1, "unit": "A"}})]).refused
    assert "wanted a unit that converts to nK" in refused[0].reason


def test_two_units_in_one_record_become_one(here: Store) -> None:
    take(
        here,
        {"width[a]": 5, "width[b]": {"value": 7, "unit": "um"}, "width[c]": {"value": 0.008, "unit": "mm"}},
    )
    assert readings(here, 0) == {"width[a]": (5, "um"), "width[b]": (7, "um"), "width[c]": (8, "um")}
    with open_store(here.where) as another:  # not only in the memory of the writer
        assert not another.take([shot(1, {"width[d]": 9})]).refused
        assert readings(another, 1) == {"width[d]": (9, "um")}


def test_clouds_share_the_entry_of_the_card(here: Store, tmp_path: Path) -> None:
    use_card(
        here,
        tmp_path,
        'machine = "heron"\n[observables.atom_number]\nunit = "atoms"\ndescription = "in the trap"\n',
    )
    take(here, {"atom_number[up]": 1e4, "atom_number[down]": 2e4})
    dataset = here.scan("split").dataset()
    assert dataset["atom_number"].attrs["units"] == "atoms"
    assert dataset["atom_number"].attrs["long_name"] == "in the trap"
    assert dataset["cloud"].values.tolist() == ["down", "up"]


def test_a_card_with_two_units_for_clouds_of_one_observable_is_refused() -> None:
    text = 'machine = "heron"\n[observables."t[up]"]\nunit = "nK"\n[observables."t[down]"]\nunit = "uK"\n'
    with pytest.raises(
        CardError, match=r"^card:5: observables.t\[down\].unit: found 'uK', wanted 'nK': all clouds of t"
    ):
        parse_card(text)


def test_two_species(here: Store, tmp_path: Path) -> None:
    use_card(
        here,
        tmp_path,
        'machine = "heron"\nspecies = ["39K", "87Rb"]\n[observables.atom_number]\nunit = "atoms"\n',
    )
    take(here, *({"atom_number[39K]": 100 + k, "atom_number[87Rb]": 200 + k} for k in range(3)))
    dataset = here.scan("split").dataset()
    assert dataset["atom_number"].sel(cloud="87Rb").values.tolist() == [200, 201, 202]
    assert dataset["atom_number"].sel(cloud="39K").values.tolist() == [100, 101, 102]


@pytest.mark.parametrize("cloud", ODD)
def test_odd_names_of_clouds_come_back(cloud: str, here: Store, tmp_path: Path) -> None:
    name = f"atom_number[{cloud}]"
    both = [{name: {"value": 10 + k, "stderr": 1}, "atom_number[b]": 20 + k} for k in range(3)]
    take(here, *both)
    assert here.shot("shot-0").observables[name].value == 10
    dataset = here.scan("split").dataset()
    assert dataset["atom_number"].sel(cloud=cloud).values.tolist() == [10, 11, 12]
    write_netcdf(dataset, tmp_path / "a.nc")
    xr.testing.assert_identical(read_netcdf(tmp_path / "a.nc"), dataset)
    assert name in here.shots(observables=[name]).columns
    again = here.take([shot(0, both[0])])
    assert (again.known, again.amended) == (1, 0)


def test_frames_of_two_cameras_are_kept(here: Store) -> None:
    frames = [
        {"camera": camera, "role": role, "path": f"{camera}-{role}.tif"}
        for camera in ("side", "top")
        for role in ("atoms", "bright")
    ]
    assert not here.take([shot(0, {}, frames=frames)]).refused
    kept = here.shot("shot-0").frames
    assert list(kept) == [(each["camera"], each["role"], each["path"]) for each in frames]


def test_one_camera_and_role_twice_is_refused_and_nothing_of_it_is_left(here: Store) -> None:
    frame = {"camera": "side", "role": "atoms", "path": "a.tif"}
    outcome = here.take([shot(0, {"atom_number": 1}, frames=[frame, frame | {"path": "b.tif"}]), shot(1, {})])
    assert outcome.new == 1
    assert "frames" in outcome.refused[0].reason
    assert "side" in outcome.refused[0].reason
    assert "atoms" in outcome.refused[0].reason
    assert here.shots()["uid"].tolist() == ["shot-1"]


@pytest.mark.parametrize("unit", ["", " [atoms]"])
@pytest.mark.parametrize("cloud", ODD)
def test_odd_names_of_clouds_in_the_heads_of_a_table(
    cloud: str, unit: str, store: Store, tmp_path: Path
) -> None:
    name = f"atom_number[{cloud}]"
    path = tmp_path / "table.csv"
    heads = ["uid", "started", "pulse [us]", f"{name}{unit}", f"{name}_stderr{unit}"]
    with path.open("w", encoding="utf-8", newline="") as file:
        csv.writer(file).writerows([heads, ["a", "2026-10-05T19:00:00Z", 10, 120.5, 3]])
    columns = CsvColumns(machine="heron", sequence="split", swept=("pulse",), observables="rest")
    outcome = store.take_file(path, columns=columns)
    assert not outcome.refused, outcome.refused
    reading = store.shot("a").observables[name]
    assert (reading.value, reading.stderr, reading.unit) == (120.5, 3, "atoms" if unit else "")


@pytest.mark.parametrize("cloud", ODD)
def test_odd_names_of_clouds_in_json_lines(cloud: str, store: Store, tmp_path: Path) -> None:
    name = f"atom_number[{cloud}]"
    path = tmp_path / "shots.jsonl"
    path.write_text(
        json.dumps(shot(0, {name: 5, f"{name}_stderr": 1}), ensure_ascii=False) + "\n", encoding="utf-8"
    )
    assert not store.take_file(path).refused
    reading = store.shot("shot-0").observables[name]
    assert (reading.value, reading.stderr) == (5, 1)
    assert list(json.loads(json.dumps(list(store.shot("shot-0").observables)))) == [name]
