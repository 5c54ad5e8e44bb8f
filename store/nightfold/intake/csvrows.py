"""The rows of a CSV file and its kin as cells, each with where it starts, streamed."""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from nightfold.errors import RecordError
from nightfold.intake.csvcells import is_number
from nightfold.intake.lines import Line, read_lines, too_long, undecodable

_DELIMITERS = ("\t", ";", ",")
_SPACES = " "


@dataclass(frozen=True, slots=True)
class Row:
    """One row: where it starts, and its cells or why there are none."""

    line: int
    byte: int
    cells: list[str]
    problem: RecordError | None = None


class Rows(Iterator[Row]):
    """The rows of a file, comments and empty ones left out; a quoted cell may go on over several lines."""

    def __init__(self, path: Path, delimiter: str | None) -> None:
        self._lines = read_lines(path)
        self.delimiter = delimiter
        self.comment = ""
        self._start: Line | None = None
        self._last = 0
        self._problem: RecordError | None = None
        self._cells: Iterator[list[str]] | None = None

    def __next__(self) -> Row:
        while True:
            self._start, self._problem = None, None
            try:
                cells = next(self._split())
            except csv.Error as error:
                cells, problem = (
                    [],
                    RecordError("", f"{self._extent()} ({error})", "quotes in pairs"),
                )
                self._problem = self._problem or problem
            start = self._start
            if start is None:
                raise StopIteration
            if self._problem or any(cell.strip() for cell in cells):
                return Row(start.number, start.byte, cells, self._problem)

    def _extent(self) -> str:
        """Return how far a row that cannot be split reaches."""
        over = f", up to line {self._last}," if self._start and self._last > self._start.number else ""
        return f"a row that{over} cannot be split"

    def _split(self) -> Iterator[list[str]]:
        """Return the iterator of cells, made when the first line is known."""
        if self._cells is None:
            texts = self._texts()
            first = next(texts, "")
            self.delimiter = self.delimiter or _find_delimiter(first)
            if self.delimiter == _SPACES:
                self._cells = (text.split() for text in _resume(first, texts))
            else:
                self._cells = csv.reader(
                    _resume(first, texts), delimiter=self.delimiter, skipinitialspace=True, strict=True
                )
        return self._cells

    def _texts(self) -> Iterator[str]:
        """Yield the lines as text, and remember where the present row starts and what is wrong with it."""
        for line in self._lines:
            if self._start is None:
                stripped = line.data.strip()
                if stripped.startswith(b"#"):
                    self.comment = stripped.lstrip(b"# \t").decode("utf-8", errors="replace")
                    continue
                if not stripped:
                    continue
                self._start = line
            self._last = line.number
            if line.too_long:
                self._problem = too_long(line)
                yield "\n"
                continue
            self._problem = self._problem or undecodable(line.data)
            yield line.data.decode("utf-8", errors="replace")


def _resume(first: str, rest: Iterator[str]) -> Iterator[str]:
    """Yield a line taken in advance, then the rest."""
    if first:
        yield first
    yield from rest


def _find_delimiter(line: str) -> str:
    """Return the delimiter a first line is written with: the commonest, else spaces or none."""
    bare = "".join(line.split('"')[::2])
    best = max(_DELIMITERS, key=bare.count)
    if bare.count(best):
        return best
    cells = line.split()
    return _SPACES if len(cells) > 1 and all(is_number(cell) for cell in cells) else ","


def header_cells(first: Row, rows: Rows, names: Sequence[str], source: str) -> tuple[list[str], bool]:
    """Return the header's cells, those stated if any are, and whether the first row was the header.

    Raises
    ------
    RecordError
        If there is none.
    """
    if names:
        return list(names), False
    if first.problem:
        raise RecordError(f"{source}:{first.line}", first.problem.found, first.problem.wanted)
    if not all(is_number(cell) for cell in first.cells):
        return first.cells, True
    commented = _comment_cells(rows.comment, rows.delimiter or ",")
    if len(commented) == len(first.cells):
        return commented, False
    raise RecordError(
        f"{source}:{first.line}",
        f"numbers ({', '.join(first.cells[:4])})",
        "a header line that names the columns; state the names for a file without one",
    )


def _comment_cells(comment: str, delimiter: str) -> list[str]:
    """Return the names on a comment line; a unit in brackets stays with the name before it."""
    if delimiter != _SPACES:
        return [cell.strip() for cell in comment.split(delimiter)]
    names: list[str] = []
    for part in comment.split():
        if names and part.startswith("["):
            names[-1] += f" {part}"
        else:
            names.append(part)
    return names
