"""Tables of sensor readings: a column with the time, one a sensor with its unit in the head."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from nightfold.errors import ChoiceNeeded, RecordError
from nightfold.intake.csvcells import parse_cell
from nightfold.intake.csvcolumns import split_heading
from nightfold.intake.csvrows import Row, Rows, header_cells
from nightfold.ledger.outcome import Incoming

_MACHINE = "machine"


@dataclass(frozen=True, slots=True)
class _Columns:
    """Which column is what: places of the time and the machine, and name and unit of every sensor."""

    at: int
    machine: int | None
    sensors: tuple[tuple[int, str, str | None], ...]
    count: int


def read_readings_table(
    path: str | Path, *, at: str = "at", delimiter: str | None = None
) -> Iterator[Incoming]:
    """Yield the rows of a table as records of readings; a row that cannot be read is handed on with its problem.

    Parameters
    ----------
    path : str or Path
        The file.
    at : str
        Name of the column with the time.
    delimiter : str, optional
        None finds out.

    Raises
    ------
    RecordError
        If there is no usable header line, a name is there twice, or a unit is not known.
    ChoiceNeeded
        If there is no column of that name.
    """
    source = str(path)
    rows = Rows(Path(path), delimiter)
    first = next(rows, None)
    if first is None:
        return
    cells, headed = header_cells(first, rows, (), source)
    columns = _read_heading(cells, at, source)
    if not headed:
        yield _incoming(first, columns, source)
    for row in rows:
        yield _incoming(row, columns, source)


def _read_heading(cells: Sequence[str], at: str, source: str) -> _Columns:
    """Return what the columns are."""
    headings = [split_heading(cell, place) for place, cell in enumerate(cells, start=1)]
    names = [name for name, _ in headings]
    for name in names:
        if names.count(name) > 1:
            raise RecordError(name, "two columns of this name", "each name once")
    if at not in names:
        raise ChoiceNeeded(
            f"{source}: no column {at!r} with the time of the readings, the columns are {', '.join(names)}; "
            "name it with --started COLUMN (at=)"
        )
    place = names.index(_MACHINE) if _MACHINE in names else None
    sensors = [
        (k, name, unit) for k, (name, unit) in enumerate(headings) if k != place and k != names.index(at)
    ]
    if not sensors:
        raise ChoiceNeeded(f"{source}: no column of a sensor beside {at!r}; wanted one a sensor")
    return _Columns(names.index(at), place, tuple(sensors), len(names))


def _incoming(row: Row, columns: _Columns, source: str) -> Incoming:
    """Return what a row holds."""
    problem = row.problem
    if problem is None:
        try:
            return Incoming(_record(row.cells, columns), source, row.line, row.byte)
        except RecordError as error:
            problem = error
    return Incoming(None, source, row.line, row.byte, problem)


def _record(cells: Sequence[str], columns: _Columns) -> dict[str, Any]:
    """Return the record of one row; an empty cell is no reading."""
    if len(cells) != columns.count:
        hint = "; are there decimal commas?" if len(cells) == 2 * columns.count else ""
        wanted = f"{columns.count}, as many as the header names{hint}"
        raise RecordError("", f"{len(cells)} cells" if len(cells) > 1 else "1 cell", wanted)
    readings: dict[str, Any] = {}
    for place, name, unit in columns.sensors:
        value = parse_cell(cells[place], name)
        if value is not None:
            readings[name] = value if unit is None else {"value": value, "unit": unit}
    record: dict[str, Any] = {"readings": readings}
    if at := cells[columns.at].strip():
        record["at"] = at
    if columns.machine is not None and (machine := cells[columns.machine].strip()):
        record["machine"] = machine
    return record
