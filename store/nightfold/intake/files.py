"""Choosing the reader of a file by its suffix."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path

from nightfold.card import MachineCard
from nightfold.errors import NotFound, RecordError
from nightfold.intake.csvcolumns import CsvColumns, Role
from nightfold.intake.csvfile import read_csv
from nightfold.intake.jsondocument import is_document, read_json_document
from nightfold.intake.jsonlines import read_json_lines
from nightfold.ledger.outcome import Incoming

JSON_LINES = (".jsonl", ".ndjson")
CSV = (".csv", ".tsv", ".dat", ".txt")


def read_file(
    path: str | Path,
    *,
    columns: CsvColumns | None = None,
    card: MachineCard | None = None,
    known: Mapping[str, Role] | None = None,
) -> Iterator[Incoming]:
    """Return an iterator over the records of a file, chosen by its suffix.

    ``.jsonl`` and ``.ndjson`` are JSON lines. ``.json`` is JSON lines too, or one array of records, or
    records printed over several lines. ``.csv``, ``.tsv``, ``.dat`` and ``.txt`` are tables.

    Parameters
    ----------
    path : str or Path
        The file.
    columns : CsvColumns, optional
        How to read a table.
    card : MachineCard, optional
        The card of the machine, for tables.
    known : mapping of str to str, optional
        What the store knows by name, for tables: ``"parameter"`` or ``"observable"``.

    Raises
    ------
    NotFound
        If there is no such file.
    RecordError
        If it is a folder, cannot be read, or its suffix is not known.
    """
    if not is_table(path):
        return read_json(path)
    if columns is None or columns.delimiter is None:
        columns = replace(columns or CsvColumns(), delimiter=usual_delimiter(path))
    return read_csv(path, card=card, columns=columns, known=known)


def is_table(path: str | Path) -> bool:
    """Return whether a file is a table by its suffix, and not JSON.

    Raises
    ------
    NotFound
        If there is no such file.
    RecordError
        If it is a folder, cannot be read, or its suffix is not known.
    """
    file = Path(path)
    _check_readable(file)
    suffix = file.suffix.lower()
    if suffix in (*JSON_LINES, ".json", *CSV):
        return suffix in CSV
    known = ", ".join((*JSON_LINES, ".json", *CSV))
    raise RecordError(str(path), f"the suffix {suffix!r}" if suffix else "no suffix", f"one of {known}")


def usual_delimiter(path: str | Path) -> str | None:
    """Return the delimiter that a suffix stands for, None where it says nothing."""
    return "\t" if Path(path).suffix.lower() == ".tsv" else None


def read_json(path: str | Path) -> Iterator[Incoming]:
    """Return an iterator over the objects of a JSON file: one a line, an array, or printed one after another."""
    if Path(path).suffix.lower() == ".json" and is_document(path):
        return read_json_document(path)
    return read_json_lines(path)


def _check_readable(file: Path) -> None:
    """Refuse what is not there, is a folder, or may not be read."""
    if file.is_dir():
        raise RecordError(str(file), "a folder", "a file of shot records; name the files in it")
    if not file.exists():
        raise NotFound(f"{file}: there is no such file; check the name and the working folder")
    if not os.access(file, os.R_OK):
        raise RecordError(str(file), "a file that may not be read", "read permission for it")
