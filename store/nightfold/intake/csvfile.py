"""Reading CSV and its kin: one shot a row, a header ``name [unit]``, streamed."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path

from nightfold.card import MachineCard
from nightfold.errors import RecordError
from nightfold.intake.csvcells import RowReader
from nightfold.intake.csvcolumns import CsvColumns, Role, is_exported, read_header
from nightfold.intake.csvrows import Row, Rows, header_cells
from nightfold.ledger.outcome import Incoming

__all__ = ["CsvColumns", "read_csv"]


def read_csv(
    path: str | Path,
    *,
    card: MachineCard | None = None,
    columns: CsvColumns | None = None,
    known: Mapping[str, Role] | None = None,
) -> Iterator[Incoming]:
    """Yield the rows of a CSV file as shot records.

    Lines that start with ``#`` and empty rows are left out; a row that cannot be read is handed on with its
    problem and the next one is read. Memory does not grow with the file.

    Parameters
    ----------
    path : str or Path
        The file.
    card : MachineCard, optional
        Says which columns are parameters and which observables, and names the machine.
    columns : CsvColumns, optional
        Says what the card does not.
    known : mapping of str to str, optional
        What the store knows by name: ``"parameter"`` or ``"observable"``.

    Raises
    ------
    RecordError
        If there is no usable header line.
    ChoiceNeeded
        If it is not said what a column is, or which machine, sequence or times the rows belong to.

    Notes
    -----
    Where the options give no column names, the first row names the columns; if it holds numbers alone, the
    comment line just above it does, given as many names.
    """
    options = columns or CsvColumns()
    source = str(path)
    rows = Rows(Path(path), options.delimiter)
    first = next(rows, None)
    if first is None:
        return
    cells, headed = header_cells(first, rows, options.names, source)
    heading = read_header(cells, options, card, source, known)
    partial = is_exported({column.name for column in heading})
    reader = RowReader(
        heading,
        options,
        options.machine or (card.machine if card else None),
        options.first_moment(card.naive_zone if card else None),
        frozenset(card.derived) if card is not None else frozenset(),
    )
    number = 0
    if not headed:
        yield _incoming(first, reader, source, number, partial)
        number += 1
    for row in rows:
        yield _incoming(row, reader, source, number, partial)
        number += 1


def _incoming(row: Row, reader: RowReader, source: str, number: int, partial: bool) -> Incoming:
    """Return what a row holds."""
    problem = row.problem
    if problem is None:
        try:
            record = reader.record(row.cells, number)
            return Incoming(record, source, row.line, row.byte, partial=partial)
        except RecordError as error:
            problem = error
    return Incoming(None, source, row.line, row.byte, problem)
