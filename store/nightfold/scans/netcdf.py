"""Scans as netCDF files, and back."""

from __future__ import annotations

import os
import re
from collections.abc import Hashable, Iterable
from pathlib import Path
from typing import Any

import xarray as xr

ORIGINAL = "nightfold_name"
"""Attribute of a variable whose name had to be changed for the file: the name it has in nightfold."""

_UNWRITABLE = re.compile(r"[/\s\x00-\x1f\x7f]")
_TIMES = {"units": "microseconds since 1970-01-01", "dtype": "int64", "calendar": "proleptic_gregorian"}


def write_netcdf(dataset: xr.Dataset, path: str | os.PathLike[str]) -> None:
    """Write a scan to a netCDF-4 file, replacing the file if there is one.

    Notes
    -----
    netCDF forbids ``/`` in names, and CF lists names separated by blanks: in names of variables and
    dimensions, ``/``, blanks and control characters become ``_`` (and names that would then be the same get more
    of them at the end). The attribute ``nightfold_name`` keeps the original; `read_netcdf` restores it.
    Times are whole microseconds since 1970, exactly.
    """
    renamed = _rename(dataset, _file_names(dataset.variables))
    encoding: dict[Hashable, dict[str, Any]] = {
        name: dict(_TIMES) for name, variable in renamed.variables.items() if variable.dtype.kind == "M"
    }
    renamed.to_netcdf(Path(path), engine="h5netcdf", encoding=encoding)


def read_netcdf(path: str | os.PathLike[str]) -> xr.Dataset:
    """Return a scan from a netCDF file that `write_netcdf` wrote, in memory, with the names it had."""
    coder = xr.coders.CFDatetimeCoder(time_unit="us")
    with xr.open_dataset(Path(path), engine="h5netcdf", decode_times=coder, decode_timedelta=False) as file:
        dataset = file.load()
    return _rename(
        dataset,
        {
            name: variable.attrs[ORIGINAL]
            for name, variable in dataset.variables.items()
            if ORIGINAL in variable.attrs
        },
    )


def _file_names(names: Iterable[Hashable]) -> dict[Hashable, str]:
    """Return the names that must change for a file, and into what."""
    changed: dict[Hashable, str] = {}
    taken = {str(name) for name in names}
    for name in sorted(map(str, names)):
        clean = _UNWRITABLE.sub("_", name)
        if clean == name:
            continue
        while clean in taken:
            clean += "_"
        taken.add(clean)
        changed[name] = clean
    return changed


def _rename(dataset: xr.Dataset, names: dict[Hashable, str]) -> xr.Dataset:
    """Return a dataset with other names, old ones noted or notes removed, and references to them kept right."""
    renamed = dataset.rename(names)
    for old, new in names.items():
        attrs = renamed[new].attrs
        if attrs.pop(ORIGINAL, None) is None:
            attrs[ORIGINAL] = old
    for variable in renamed.variables.values():
        for link in ("ancillary_variables", "co_moving_with"):
            if variable.attrs.get(link) in names:
                variable.attrs[link] = names[variable.attrs[link]]
    return renamed
