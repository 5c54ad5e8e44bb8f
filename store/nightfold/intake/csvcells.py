"""Cells of a CSV row, and the shot record they make."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

from nightfold.errors import RecordError
from nightfold.intake.csvcolumns import Column, CsvColumns
from nightfold.records import shorten

_NUMBER = re.compile(r"[+-]?(?:[0-9]+(\.[0-9]*)?|(\.[0-9]+))([eE][+-]?[0-9]+)?")
_DECIMAL_COMMA = re.compile(r"[+-]?[0-9]*,[0-9]+(?:[eE][+-]?[0-9]+)?")
_NOT_FINITE = {"nan", "inf", "+inf", "-inf", "infinity", "+infinity", "-infinity"}
_FLAGS = {"true": True, "false": False, "1": True, "0": False, "": False, "yes": True, "no": False}
Cell = float | int | bool | str | None


def is_number(cell: str) -> bool:
    """Return whether a cell holds a finite number."""
    return _NUMBER.fullmatch(cell.strip()) is not None


def parse_cell(cell: str, name: str) -> Cell:
    """Return what a cell holds: a number (whole ones exactly), a truth, None if empty, else its text.

    Raises
    ------
    RecordError
        If it is a number with a decimal comma, or a whole number of thousands of digits.
    """
    text = cell.strip()
    if not text:
        return None
    if number := _NUMBER.fullmatch(text):
        if number.lastindex:
            return float(text)
        try:
            return int(text)
        except ValueError as error:
            raise RecordError(name, f"a whole number of {len(text)} digits", "at most 4300 digits") from error
    lower = text.lower()
    if lower in _NOT_FINITE:
        return float(lower)
    if lower in ("true", "false"):
        return lower == "true"
    if _DECIMAL_COMMA.fullmatch(text):
        wanted = f"a decimal point, {text.replace(',', '.')}; export the table with decimal points"
        raise RecordError(name, f"{text!r}, a decimal comma", wanted)
    return text


def parse_flag(cell: str, name: str) -> bool:
    """Return a truth value, also of 1, 0, yes, no, and of an empty cell, which is false.

    Raises
    ------
    RecordError
        If it is anything else.
    """
    flag = _FLAGS.get(cell.strip().lower())
    if flag is None:
        raise RecordError(name, shorten(cell), "true or false")
    return flag


def parse_failure(cell: str) -> str | None:
    """Return why a shot failed; a bare flag becomes a reason, an empty cell or a false flag none."""
    flag = _FLAGS.get(cell.strip().lower())
    if flag is None:
        return cell.strip()
    return "marked as failed" if flag else None


@dataclass(frozen=True, slots=True)
class RowReader:
    """Turns rows into shot records.

    Attributes
    ----------
    columns : tuple of Column
    options : CsvColumns
    machine : str or None
        Taken for rows that do not name their machine.
    first : datetime or None
        When the row 0 was taken, for a file without times.
    derived : frozenset of str
        What the card derives, and may be swept without a column.
    """

    columns: tuple[Column, ...]
    options: CsvColumns
    machine: str | None
    first: datetime | None
    derived: frozenset[str] = frozenset()

    def record(self, cells: Sequence[str], row: int) -> dict[str, Any]:
        """Return the shot record of one row.

        Raises
        ------
        RecordError
            If the row has more or fewer cells than there are columns, or a cell cannot be read.
        """
        if len(cells) != len(self.columns):
            hint = "; are there decimal commas?" if len(cells) == 2 * len(self.columns) else ""
            wanted = f"{len(self.columns)}, as many as the header names{hint}"
            raise RecordError("", f"{len(cells)} cells" if len(cells) > 1 else "1 cell", wanted)
        record: dict[str, Any] = {"format": 1}
        for name in ("machine", "sequence", "scan"):
            default = self.machine if name == "machine" else getattr(self.options, name)
            if default is not None:
                record[name] = default
        if self.first is not None:
            moment = self.first + timedelta(seconds=row * self.options.cycle_s)
            record["started"] = moment.isoformat()
        parameters: dict[str, Any] = {}
        observables: dict[str, Any] = {}
        uncertain: list[tuple[Column, str]] = []
        for column, cell in zip(self.columns, cells, strict=True):
            if column.role == "parameter":
                setting = _setting(column, cell)
                if setting is not None:
                    parameters[column.name] = setting
            elif column.role == "observable":
                observables[column.name] = _reading(column, cell)
            elif column.role == "stderr":
                uncertain.append((column, cell))
            elif column.role != "derived":
                self._describe(record, column, cell)
        for column, cell in uncertain:
            _add_stderr(observables, column, cell)
        swept = [name for name in self.options.swept if name in parameters or name in self.derived]
        return (
            record
            | ({"swept": swept} if swept else {})
            | {"parameters": parameters, "observables": observables}
        )

    def _describe(self, record: dict[str, Any], column: Column, cell: str) -> None:
        """Enter a cell that says something about the shot itself."""
        if column.role == "reference":
            record["reference"] = parse_flag(cell, column.name)
        elif column.role == "failed":
            if reason := parse_failure(cell):
                record["failed"] = reason
        elif cell.strip():
            record[column.role] = cell.strip()


def _setting(column: Column, cell: str) -> Any:
    """Return a setting as the shot record states it, None for an empty cell."""
    value = (cell.strip() or None) if column.is_text else parse_cell(cell, column.name)
    return value if column.unit is None or value is None else {"value": value, "unit": column.unit}


def _reading(column: Column, cell: str) -> Any:
    """Return a reading as the shot record states it; an empty cell is null."""
    value = parse_cell(cell, column.name)
    return value if column.unit is None or value is None else {"value": value, "unit": column.unit}


def _add_stderr(observables: dict[str, Any], column: Column, cell: str) -> None:
    """Add a standard uncertainty to a reading that is not null."""
    stderr = parse_cell(cell, f"{column.name}_stderr")
    reading = observables[column.name]
    if stderr is None or reading is None:
        return
    if not isinstance(reading, dict):
        reading = observables[column.name] = {"value": reading}
    reading["stderr"] = stderr
