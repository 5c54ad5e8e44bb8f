from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.scans.grid import build_dataset


def table(columns: Mapping[str, Sequence[Any]], observable: str = "atom_number") -> pd.DataFrame:
    """Settings, and a number for each shot: 100, 101, … with uncertainties 1.0, 1.1, …"""
    count = len(next(iter(columns.values())))
    started = pd.Timestamp("2026-10-05T19:14:03.25Z") + pd.to_timedelta(15 * np.arange(count), unit="s")
    return pd.DataFrame(
        {
            "uid": [f"shot-{k}" for k in range(count)],
            "shot_id": np.arange(1, count + 1),
            "started": pd.Series(started).astype("datetime64[us, UTC]"),
            "set_aside": np.zeros(count, bool),
            **columns,
            observable: 100.0 + np.arange(count),
            f"{observable}_stderr": 1 + 0.1 * np.arange(count),
        }
    )


def build(frame: pd.DataFrame, *axes: str, **options: Any) -> xr.Dataset:
    settings: dict[str, Any] = {"co_moving": {}, "observables": ["atom_number"], "units": {}} | options
    return build_dataset(frame, axes, **settings)


def test_one_axis_in_any_order() -> None:
    dataset = build(table({"x": [3.0, 1.0, 2.0]}), "x", units={"x": "ms", "atom_number": "atoms"})
    assert dict(dataset.sizes) == {"x": 3}
    assert dataset["x"].values.tolist() == [1.0, 2.0, 3.0]
    assert dataset["atom_number"].values.tolist() == [101.0, 102.0, 100.0]
    assert dataset["atom_number_stderr"].values.tolist() == [1.1, 1.2, 1.0]
    assert dataset["shot_id"].values.tolist() == [2, 3, 1]
    assert dataset["uid"].values.tolist() == ["shot-1", "shot-2", "shot-0"]
    assert dataset["set_aside"].values.tolist() == [False] * 3
    assert dataset["started"].values[2] == np.datetime64("2026-10-05T19:14:03.250000")
    assert dataset["x"].attrs == {"long_name": "x", "units": "ms", "merge_tolerance": pytest.approx(2e-6)}


def test_attributes_by_the_conventions() -> None:
    dataset = build(
        table({"x": [3.0, 1.0]}),
        "x",
        units={"x": "ms", "atom_number": "atoms"},
        descriptions={"atom_number": "atoms left in the trap"},
        attrs={"scan": "loss#2", "label": None, "shots": 2, "complete": True, "tags": ["a", 1]},
    )
    assert dataset.attrs == {
        "Conventions": "CF-1.11",
        "scan": "loss#2",
        "shots": 2,
        "complete": 1,
        "tags": ["a", 1],
    }
    assert dataset["atom_number"].attrs == {
        "long_name": "atoms left in the trap",
        "units": "atoms",
        "ancillary_variables": "atom_number_stderr",
    }
    assert dataset["atom_number_stderr"].attrs["units"] == "atoms"
    assert dataset["started"].attrs["time_zone"] == "UTC"


def test_two_axes_with_a_hole() -> None:
    dataset = build(table({"x": [1.0, 2.0, 1.0], "y": [10.0, 10.0, 20.0]}), "y", "x")
    assert dataset["atom_number"].dims == ("y", "x")
    np.testing.assert_array_equal(dataset["atom_number"], [[100.0, 101.0], [102.0, np.nan]])
    np.testing.assert_array_equal(dataset["shot_id"], [[1, 2], [3, -1]])
    assert dataset["uid"].values[1, 1] == ""
    assert np.isnat(dataset["started"].values[1, 1])
    assert dataset["shot_id"].dtype == np.int64


def test_three_axes() -> None:
    points = [(x, y, z) for z in (0.0, 1.0) for y in (0.0, 1.0, 2.0) for x in (0.0, 1.0, 2.0, 3.0)]
    x, y, z = (list(column) for column in zip(*points, strict=True))
    dataset = build(table({"x": x, "y": y, "z": z}), "x", "y", "z")
    assert dataset["atom_number"].dims == ("x", "y", "z")
    for k, (a, b, c) in enumerate(points):
        assert dataset["atom_number"].sel(x=a, y=b, z=c).item() == 100 + k


def test_unequal_repeats_in_order_of_start() -> None:
    dataset = build(table({"x": [1.0, 2.0, 1.0, 1.0]}), "x")
    assert dataset["atom_number"].dims == ("x", "repeat")
    np.testing.assert_array_equal(dataset["atom_number"], [[100.0, 102.0, 103.0], [101.0, np.nan, np.nan]])


def test_jitter_is_merged_and_the_tolerance_stated() -> None:
    frame = table({"x": [0.3, 0.1 + 0.2, 1.3]})
    dataset = build(frame, "x")
    assert dict(dataset.sizes) == {"x": 2, "repeat": 2}
    assert dataset["x"].attrs["merge_tolerance"] == pytest.approx(1e-6)
    coarse = build(table({"x": [1.004, 0.998, 2.0], "y": [1.0, 1.0, 1.001]}), "x", "y", tolerance={"x": 0.01})
    assert coarse["x"].values.tolist() == [0.998, 2.0]
    assert coarse["x"].attrs["merge_tolerance"] == 0.01
    assert coarse["y"].values.tolist() == [1.0, 1.001]
    assert build(frame, "x", tolerance=0.0).sizes["x"] == 3


def test_text_and_truth_axes() -> None:
    frame = table({"species": ["up", "down", "up", "down"], "repump": [True, True, False, False]})
    dataset = build(frame, "species", "repump")
    assert dataset["species"].values.tolist() == ["down", "up"]
    assert dataset["repump"].values.tolist() == [False, True]
    assert dataset["atom_number"].sel(species="up", repump=False).item() == 102.0


def test_missing_settings_have_a_point_of_their_own() -> None:
    dataset = build(table({"x": [2.0, None, 1.0], "s": ["a", None, "a"]}), "x", "s")
    assert dataset["x"].values.tolist()[:2] == [1.0, 2.0]
    assert np.isnan(dataset["x"].values[2])
    assert dataset["s"].values.tolist() == ["", "a"]
    assert dataset["atom_number"].values[2, 0] == 101.0
    truth = build(table({"t": [True, None, False]}), "t")
    assert truth["t"].values.tolist() == ["", "False", "True"]


def test_co_moving_parameter_is_a_coordinate_on_its_leader() -> None:
    frame = table({"coil": [3.0, 1.0, 2.0, 3.0], "rf": [9.0, 1.0, 4.0, 9.0], "beam": ["b", "a", "a", "b"]})
    dataset = build(frame, "coil", co_moving={"rf": "coil", "beam": "coil"}, units={"rf": "MHz"})
    assert dataset["rf"].dims == ("coil",)
    assert dataset["rf"].values.tolist() == [1.0, 4.0, 9.0]
    assert dataset["rf"].attrs == {"long_name": "rf", "units": "MHz", "co_moving_with": "coil"}
    assert dataset["beam"].values.tolist() == ["a", "a", "b"]
    assert "rf" in dataset.coords


def test_follower_with_several_values_at_a_point_is_spread() -> None:
    frame = table({"coil": [3.0, 1.0, 3.0], "rf": [9.0, 1.0, 7.0]})
    dataset = build(frame, "coil", co_moving={"rf": "coil"})
    assert dataset["rf"].dims == ("coil", "repeat")
    np.testing.assert_array_equal(dataset["rf"], [[1.0, np.nan], [9.0, 7.0]])


def test_sparse_cloud_keeps_one_dimension() -> None:
    draw = np.random.default_rng(3)
    x, y = draw.random((2, 10))
    frame = table({"x": list(x), "y": list(y), "z": list(2 * x)})
    dataset = build(frame, "x", "y", co_moving={"z": "x"}, units={"x": "ms"})
    assert dict(dataset.sizes) == {"shot": 10}
    np.testing.assert_array_equal(dataset["x"], x)
    np.testing.assert_array_equal(dataset["z"], 2 * x)
    assert dataset["y"].dims == dataset["atom_number"].dims == ("shot",)
    assert set(dataset.coords) == {"x", "y", "z"}
    assert build(frame, "x").sizes["x"] == 10


def test_grid_is_kept_up_to_four_times_the_shots() -> None:
    four = table({"x": [0.0, 1.0, 2.0, 3.0], "y": [0.0, 1.0, 2.0, 3.0]})
    assert "shot" not in build(four, "x", "y").sizes
    five = table({"x": [0.0, 1.0, 2.0, 3.0, 4.0], "y": [0.0, 1.0, 2.0, 3.0, 4.0]})
    assert "shot" in build(five, "x", "y").sizes


def test_repeats_alone() -> None:
    dataset = build(table({"x": [1.0, 1.0, 1.0]}))
    assert dataset["atom_number"].dims == ("repeat",)
    assert dataset["atom_number"].values.tolist() == [100.0, 101.0, 102.0]


@pytest.mark.parametrize("axes", [(), ("x",), ("x", "y")])
def test_no_shots_at_all(axes: tuple[str, ...]) -> None:
    frame = table({"x": [1.0], "y": [1.0]}).iloc[:0]
    dataset = build(frame, *axes)
    assert dataset["atom_number"].size == 0


def test_shots_set_aside_are_marked() -> None:
    frame = table({"x": [1.0, 2.0, 3.0]})
    frame.loc[1, "set_aside"] = True
    assert build(frame, "x")["set_aside"].values.tolist() == [False, True, False]


def test_clouds_make_a_dimension() -> None:
    frame = table({"x": [1.0, 2.0]}, "atom_number[up]")
    frame["atom_number[down]"] = [7.0, 8.0]
    frame["width"] = [1.0, None]
    units = {"atom_number[up]": "atoms", "width": "um"}
    dataset = build(frame, "x", observables=["atom_number[up]", "atom_number[down]", "width"], units=units)
    assert dataset["atom_number"].dims == ("x", "cloud")
    assert dataset["cloud"].values.tolist() == ["down", "up"]
    assert dataset["atom_number"].sel(cloud="up").values.tolist() == [100.0, 101.0]
    assert dataset["atom_number_stderr"].sel(cloud="up").values.tolist() == [1.0, 1.1]
    assert np.isnan(dataset["atom_number_stderr"].sel(cloud="down")).all()
    assert dataset["atom_number"].attrs["units"] == "atoms"
    assert dataset["width"].dims == ("x",)
    assert "width_stderr" not in dataset


def test_total_beside_clouds_is_the_nameless_cloud() -> None:
    frame = table({"x": [1.0, 2.0]})
    frame["atom_number[up]"] = [7.0, 8.0]
    dataset = build(frame, "x", observables=["atom_number", "atom_number[up]"])
    assert dataset["cloud"].values.tolist() == ["", "up"]
    assert dataset["atom_number"].sel(cloud="").values.tolist() == [100.0, 101.0]


def test_names_that_are_taken_get_a_dash_behind() -> None:
    frame = table({"repeat": [1.0, 1.0, 2.0]}, "shot")
    dataset = build(frame, "repeat", observables=["shot"])
    assert dataset["shot_"].dims == ("repeat_", "repeat")
    assert dataset["repeat_"].attrs["original_name"] == "repeat"


@st.composite
def scans(draw: st.DrawFn) -> pd.DataFrame:
    value = st.sampled_from([0.0, 0.5, 1.0, 1.5, float("nan")])
    rows = draw(
        st.lists(st.tuples(value, st.sampled_from(["a", "b"]), st.booleans()), min_size=1, max_size=30)
    )
    x, s, t = (list(column) for column in zip(*rows, strict=True))
    return table({"x": x, "s": s, "t": t})


@settings(max_examples=60, deadline=None)
@given(scans(), st.sampled_from([("x",), ("x", "s"), ("s", "t", "x"), ()]), st.randoms())
def test_order_does_not_matter_and_every_shot_appears_once(
    frame: pd.DataFrame, axes: tuple[str, ...], draw: Any
) -> None:
    dataset = build(frame, *axes)
    order = list(range(len(frame)))
    draw.shuffle(order)
    xr.testing.assert_identical(build(frame.iloc[order], *axes), dataset)
    ids = dataset["shot_id"].values.ravel()
    assert sorted(ids[ids >= 0]) == frame["shot_id"].tolist()
    flat = dataset["atom_number"].values.ravel()
    assert dict(zip(ids[ids >= 0], flat[ids >= 0], strict=True)) == dict(
        zip(frame["shot_id"], frame["atom_number"], strict=True)
    )
    assert np.isnan(flat[ids < 0]).all()


def test_clouds_in_another_unit_stay_apart() -> None:
    frame = table({"x": [1.0, 2.0]}, "temperature[up]")
    frame["temperature[down]"] = [0.4, 0.5]
    names = ["temperature[up]", "temperature[down]"]
    apart = build(frame, "x", observables=names, units={names[0]: "nK", names[1]: "uK"})
    assert apart["temperature"].sel(cloud="up").values.tolist() == [100.0, 101.0]
    assert apart["temperature[down]"].values.tolist() == [0.4, 0.5]
    assert apart["temperature[down]"].attrs["units"] == "uK"
    joined = build(frame, "x", observables=names, units={names[0]: "", names[1]: "nK"})
    assert joined["temperature"].sel(cloud="down").values.tolist() == [0.4, 0.5]
    assert joined["temperature"].attrs["units"] == "nK"
