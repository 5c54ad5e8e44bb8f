"""``nightfold export KEY FILE``: write a scan to a file."""

from __future__ import annotations

import os
import re
from argparse import ArgumentParser, Namespace
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import add_relative, add_scan_key, relation
from nightfold_cli.failures import UsageError
from nightfold_cli.naming import name_in, named_scan
from nightfold_cli.opening import opened
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.scans.scan import Scan

_ERRNO = re.compile(r"errno = (\d+)")
HELP = "write a scan to a netCDF or CSV file"
EXAMPLES = (
    "nightfold export loss-coarse loss.nc",
    "nightfold export 41 decay.csv --set-aside",
    "nightfold export loss-coarse loss.nc -o atom_number --relative-to reference",
)
_KINDS = {".nc": "netCDF", ".csv": "CSV"}


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    add_scan_key(parser)
    parser.add_argument(
        "file", metavar="FILE", type=Path, help="what to write: NAME.nc (a grid) or NAME.csv (a row a shot)"
    )
    parser.add_argument("--force", action="store_true", help="write over a file that is there")
    parser.add_argument("--set-aside", action="store_true", help="with the shots that are set aside")
    parser.add_argument(
        "-o", "--observable", metavar="NAME", action="append", help="only this one; may be repeated"
    )
    add_relative(parser)


def run(args: Namespace) -> int:
    """Write the scan as its suffix says; never half a file."""
    from nightfold.errors import NotFound

    screen = Screen.here(args.json)
    path: Path = args.file
    kind = _KINDS.get(path.suffix.lower())
    if kind is None:
        raise UsageError(f"{path}: found the suffix {path.suffix or '(none)'!r}, wanted .nc or .csv")
    if path.exists() and not args.force:
        raise UsageError(f"{path} is there already; --force writes over it")
    if not path.absolute().parent.is_dir():
        raise NotFound(f"{path}: there is no folder {str(path.parent)!r}; make it, or name another one")
    with opened(args, screen) as store:
        scan = named_scan(store, args.key, screen)
        _write(scan, path, kind, {"observables": args.observable, **relation(args)}, args.set_aside)
        key, shots = name_in(store, scan), scan.shots + (scan.set_aside if args.set_aside else 0)
    if screen.json:
        screen.answer({"scan": key, "file": str(path), "format": kind, "shots": shots})
        return 0
    screen.text(f"{key}: {counted(shots, 'shot')} written to {path} ({kind})")
    return 0


def _write(scan: Scan, path: Path, kind: str, choice: Mapping[str, Any], set_aside: bool) -> None:
    """Write beside the file, then move into its place.

    Raises
    ------
    OSError
        With file and reason, whatever the library that writes says.
    """
    part = path.with_name(path.name + ".part")
    try:
        if kind == "netCDF":
            from nightfold.scans.netcdf import write_netcdf

            write_netcdf(scan.dataset(set_aside=set_aside, **choice), part)
        else:
            table = _renamed(scan.table(set_aside=set_aside, **choice))
            _with_units(_with_scan(table, scan)).to_csv(part, index=False)
        part.replace(path)
    except OSError as error:
        number = error.errno or int((_ERRNO.search(str(error)) or [0, 0])[1])
        raise OSError(number, os.strerror(number) if number else "it cannot be written", str(path)) from error
    finally:
        part.unlink(missing_ok=True)


def _with_scan(table: pd.DataFrame, scan: Scan) -> pd.DataFrame:
    """Return the table with machine, sequence and label of the scan in every row, so that `take` reads it back."""
    said = {"machine": scan.machine, "sequence": scan.sequence, "scan": scan.label}
    columns = {name: value for name, value in said.items() if value is not None and name not in table}
    joined = table.assign(**columns)[[*table.columns[:1], *columns, *table.columns[1:]]]
    joined.attrs = table.attrs
    return joined


def _renamed(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table whose ratios are called ``atom_number_relative``, so that none is taken for a reading."""
    parts = {name: _parts(name) for name in table.attrs.get("levels", {})}
    heads = {name: f"{base}_relative{cloud}" for name, (base, cloud) in parts.items()}
    heads |= {f"{name}_stderr": f"{head}_stderr" for name, head in heads.items()}
    units = {heads.get(name, name): unit for name, unit in table.attrs["units"].items()}
    renamed = table.rename(columns=heads)
    renamed.attrs = {**table.attrs, "units": units}
    return renamed


def _parts(name: str) -> tuple[str, str]:
    """Return an observable and its cloud with brackets, if it has one."""
    from nightfold.card import without_cloud

    base = without_cloud(name)
    return base, name.removeprefix(base)


def _with_units(table: pd.DataFrame) -> pd.DataFrame:
    """Return the table with its units in the heads, ``hold_time [ms]``, so that `take` reads it back."""
    units = table.attrs["units"]
    heads = {}
    for name in map(str, table.columns):
        unit = units.get(name) or units.get(name.removesuffix("_stderr"))
        heads[name] = f"{name} [{unit}]" if unit else name
    return table.rename(columns=heads)
