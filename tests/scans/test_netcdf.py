from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from nightfold.scans.grid import build_dataset
from nightfold.scans.netcdf import read_netcdf, write_netcdf

UGLY = ["hold time / ms", "hold_time___ms", "größe 🧊 'a' \"b\"", "step#2.duration", "tab\there"]


def dataset_of(axes: list[str], follower: str, observable: str) -> xr.Dataset:
    started = pd.to_datetime(
        ["2026-10-05T19:14:03.250001Z", "2026-10-05T19:14:04.000000Z", "2026-10-05T19:14:05.000000Z"]
    )
    columns: dict[str, Any] = {
        "uid": ["a", "b 🧊", "c"],
        "shot_id": [2**53 + 1, 7, 9],
        "started": pd.Series(started).astype("datetime64[us, UTC]"),
        "set_aside": [False, True, False],
        follower: ["north", "süd", "south pole"],
        observable: [1.5, float("nan"), 1e5],
        f"{observable}_stderr": [0.1, float("nan"), float("inf")],
        f"{observable}[up]": [1.0, 2.0, 3.0],
        "width": [1.0, 2.0, None],
        **{axis: [1.0, 2.0, 3.0] for axis in axes},
    }
    return build_dataset(
        pd.DataFrame(columns),
        axes,
        co_moving={follower: axes[0]},
        observables=[observable, f"{observable}[up]", "width"],
        units={axes[0]: "ms", observable: "atoms"},
        attrs={"scan": "loss/coarse 🧊", "shots": 3, "empty": ""},
    )


@pytest.mark.parametrize("axes", [["x"], ["x", "y"], ["x", "y", "z"]])
def test_round_trip(tmp_path: Path, axes: list[str]) -> None:
    dataset = dataset_of(axes, "beam", "atom_number")
    assert ("shot" in dataset.sizes) == (len(axes) == 3)
    write_netcdf(dataset, tmp_path / "scan.nc")
    again = read_netcdf(tmp_path / "scan.nc")
    xr.testing.assert_identical(again, dataset)
    assert {name: variable.dtype.kind for name, variable in again.variables.items()} == {
        name: variable.dtype.kind for name, variable in dataset.variables.items()
    }
    assert again["shot_id"].max() == 2**53 + 1
    assert again["started"].dtype == np.dtype("datetime64[us]")
    with xr.open_dataset(tmp_path / "scan.nc", engine="h5netcdf") as plain:
        xr.testing.assert_identical(plain.load(), dataset)


@pytest.mark.parametrize("axis", UGLY)
@pytest.mark.parametrize("others", [[], ["y", "z"]])
def test_round_trip_of_names_that_files_do_not_like(tmp_path: Path, axis: str, others: list[str]) -> None:
    dataset = dataset_of([axis, *others], "beam / angle", "atoms in / out")
    before = dataset.copy(deep=True)
    write_netcdf(dataset, tmp_path / "scan.nc")
    xr.testing.assert_identical(dataset, before)
    xr.testing.assert_identical(read_netcdf(tmp_path / "scan.nc"), dataset)
    with xr.open_dataset(tmp_path / "scan.nc", engine="h5netcdf") as plain:
        assert not any("/" in str(name) or " " in str(name) for name in plain.variables)
        assert plain["beam___angle"].attrs["nightfold_name"] == "beam / angle"
        assert plain["atoms_in___out"].attrs["ancillary_variables"] == "atoms_in___out_stderr"
        assert set(plain.coords) >= {"beam___angle"}


def test_names_that_would_meet_are_kept_apart(tmp_path: Path) -> None:
    dataset = xr.Dataset({"a b": ("x", [1.0]), "a/b": ("x", [2.0]), "a_b": ("x", [3.0])})
    write_netcdf(dataset, tmp_path / "scan.nc")
    xr.testing.assert_identical(read_netcdf(tmp_path / "scan.nc"), dataset)


def test_truth_axes_repeats_and_holes(tmp_path: Path) -> None:
    frame = pd.DataFrame(
        {
            "uid": ["a", "b", "c"],
            "shot_id": [1, 2, 3],
            "started": pd.to_datetime(["2026-01-01T00:00:00Z"] * 3),
            "set_aside": [False] * 3,
            "on": [True, False, True],
            "species": ["K", "K", "K"],
            "n": [1.0, 2.0, 3.0],
        }
    )
    dataset = build_dataset(frame, ["on", "species"], co_moving={}, observables=["n"], units={})
    write_netcdf(dataset, tmp_path / "scan.nc")
    xr.testing.assert_identical(read_netcdf(tmp_path / "scan.nc"), dataset)
    write_netcdf(dataset, tmp_path / "scan.nc")
    empty = build_dataset(frame.iloc[:0], ["species"], co_moving={}, observables=["n"], units={})
    write_netcdf(empty, tmp_path / "empty.nc")
    assert read_netcdf(tmp_path / "empty.nc").sizes == {"species": 0}
