"""Fits of slices as a Dataset: values, holes, units, netCDF and back."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from nightfold import FitTable, fit_many, open_store
from nightfold.scans.netcdf import read_netcdf, write_netcdf

START = datetime(2026, 10, 5, 19, tzinfo=UTC)


def records(others: dict[str, tuple[Any, ...]], left_out: tuple[Any, ...] = ()) -> list[dict[str, Any]]:
    rng = np.random.default_rng(5)
    made: list[dict[str, Any]] = []
    for values in product(*others.values()):
        if values == left_out:
            continue
        where = dict(zip(others, values, strict=True))
        center = 61.0 + sum(0.001 * value for value in values if isinstance(value, float))
        for current in rng.permutation(np.linspace(59, 63, 15)):
            number = 1e5 - 5e4 / (1 + (2 * (current - center) / 0.9) ** 2) + 800 * rng.normal()
            made.append(
                {
                    "machine": "heron",
                    "started": (START + timedelta(seconds=9 * len(made))).isoformat(),
                    "sequence": "hold",
                    "scan": "map",
                    "swept": ["coil_current", *others],
                    "parameters": {"coil_current": {"value": float(current), "unit": "A"}}
                    | {
                        name: {"value": value, "unit": "ms"} if isinstance(value, float) else value
                        for name, value in where.items()
                    },
                    "observables": {"atom_number": {"value": float(number), "unit": "atoms"}},
                }
            )
    return made


def fitted(folder: Path, others: dict[str, tuple[Any, ...]], left_out: tuple[Any, ...] = ()) -> FitTable:
    with open_store(folder / "s.sqlite", create=True) as store:
        store.take(records(others, left_out))
        table = store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    assert isinstance(table, FitTable)
    return table


def test_estimates_stand_at_their_slices(tmp_path: Path) -> None:
    table = fitted(tmp_path, {"hold": (100.0, 200.0, 300.0)})
    dataset = table.to_dataset()
    assert dataset.center.dims == ("hold",)
    assert dataset.hold.values.tolist() == [100.0, 200.0, 300.0]
    for row, where in enumerate(table.slices):
        one, at = table.result(row).estimates["center"], dataset.sel(hold=where["hold"])
        assert at.center.item() == one.value
        assert at.center_stderr.item() == one.stderr
        assert (at.center_low68.item(), at.center_high68.item()) == pytest.approx(
            one.interval(0.6827), rel=1e-9
        )
        assert (at.center_low95.item(), at.center_high95.item()) == pytest.approx(
            one.interval(0.95), rel=1e-9
        )
        assert at.trusted.item() is bool(table.trusted[row])
        assert at.points.item() == 15
    assert dataset.center.attrs["units"] == "A"
    assert dataset.amplitude_stderr.attrs["units"] == "atoms"
    assert dataset.hold.attrs["units"] == "ms"
    assert dataset.residual_stderr.attrs["units"] == "atoms"
    assert set(dataset.center.attrs["ancillary_variables"].split()) <= set(dataset.variables)
    assert dataset.attrs["scan"] == "map#1"
    assert (dataset.attrs["observable"], dataset.attrs["along"]) == ("atom_number", "coil_current")
    assert (dataset.attrs["model"], dataset.attrs["background"]) == ("lorentzian", "flat")


def test_three_axes_with_a_hole(tmp_path: Path) -> None:
    table = fitted(tmp_path, {"hold": (100.0, 200.0), "axis": ("x", "y", "z")}, left_out=(200.0, "y"))
    dataset = table.to_dataset()
    assert dict(dataset.sizes) == {"hold": 2, "axis": 3}
    hole = dataset.sel(hold=200.0, axis="y")
    assert np.isnan(hole.center.item())
    assert (hole.trusted.item(), hole.warnings.item(), hole.points.item()) == (False, "", 0)
    assert int(dataset.points.astype(bool).sum()) == len(table) == 5


def test_it_goes_through_a_file(tmp_path: Path) -> None:
    dataset = fitted(tmp_path, {"hold": (100.0, 200.0), "axis": ("x", "y")}).to_dataset()
    write_netcdf(dataset, tmp_path / "fits.nc")
    back = read_netcdf(tmp_path / "fits.nc")
    xr.testing.assert_identical(back, dataset)
    assert back.trusted.dtype == np.bool_


def test_an_axis_may_have_the_name_of_an_estimate(tmp_path: Path) -> None:
    dataset = fitted(tmp_path, {"center": (100.0, 200.0), "trusted": (1.0, 2.0)}).to_dataset()
    assert dataset.center.values.tolist() == [100.0, 200.0]
    assert dataset.center_.dims == ("center", "trusted")
    assert dataset.trusted_.dtype == np.bool_


def test_fits_of_no_scan_have_one_dimension() -> None:
    x = np.linspace(0, 3, 12)
    Y = np.exp(-x / np.array([[1.0], [2.0]])) + 0.001 * np.cos(9 * x)
    dataset = fit_many(x, Y, "exponential", unit_x="ms").to_dataset()
    assert dataset.lifetime.dims == ("fit",)
    assert dataset.lifetime.values == pytest.approx([1.0, 2.0], rel=0.02)
    assert dataset.lifetime.attrs["units"] == "ms"


def test_scattered_slices_stay_a_list() -> None:
    from dataclasses import replace

    x = np.linspace(0, 3, 12)
    table = fit_many(x, np.exp(-x) + np.arange(1, 12)[:, None] * 1e-3 * np.cos(9 * x), "exponential")
    slices = tuple({"a": float(row), "b": float(row**2)} for row in range(11))
    dataset = replace(table, slices=slices, slice_units={"a": "G"}).to_dataset()
    assert dataset.lifetime.dims == ("slice",)
    assert dataset.b.values.tolist() == [where["b"] for where in slices]
    assert dataset.a.attrs["units"] == "G"


def test_derived_numbers_are_there_too() -> None:
    x = np.linspace(0, 3, 12)
    table = fit_many(x, np.exp(-x / np.array([[1.0], [2.0]])) + 0.001 * np.cos(9 * x), "exponential")
    dataset = table.to_dataset()
    assert table.derived
    for name, column in table.derived.items():
        assert dataset[name].values.tolist() == column.value.tolist()
        assert dataset[f"{name}_stderr"].values.tolist() == column.stderr.tolist()
