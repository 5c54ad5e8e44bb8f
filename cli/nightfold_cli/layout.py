"""Tables in columns: what there is room for, and how the cells are wrapped and aligned.

Pure text; `render` prints it. Columns that may be spared go before anything is cut, cells that may wrap are wrapped,
and heads are broken in two before a column goes.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass, field

from nightfold_cli.printable import printable

GAP = 2
_WIDEST_WORD = 24


@dataclass(frozen=True, slots=True)
class Cell:
    """A cell that reads differently on a screen, where it may have several lines, and in a pipe."""

    screen: str
    plain: str = ""
    strong: bool = False

    @classmethod
    def of(cls, lines: Sequence[str], plain: str | None = None) -> Cell:
        """Return a cell of several lines; in a pipe they are parted by semicolons."""
        kept = [printable(line) for line in lines]
        return cls("\n".join(kept), "; ".join(line for line in kept if line) if plain is None else plain)


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table.

    Attributes
    ----------
    name : str
        What stands above it.
    right : bool
        Whether it is aligned to the right, as numbers are.
    spare : int
        0 for a column that is always shown; others are left out on a narrow screen, the highest first.
    wraps : bool
        Whether long cells may run over several lines.
    least : int
        How wide a column that wraps must stay before spare ones go.
    plain_name : str
        The name in a pipe, where it differs.
    quiet : bool
        Whether nothing is said when there is no room for it.
    """

    name: str
    right: bool = False
    spare: int = 0
    wraps: bool = False
    least: int = 0
    plain_name: str = ""
    quiet: bool = False


Row = Sequence[str | Cell]


@dataclass(frozen=True, slots=True)
class Laid:
    """A table as lines of text.

    Attributes
    ----------
    head : tuple of str
        Lines of the head.
    rows : tuple of tuple of str
        Lines of each row.
    hidden : tuple of str
        Names of the columns there was no room for.
    """

    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    hidden: tuple[str, ...] = field(default=())


def cell_text(cell: str | Cell, *, screen: bool) -> str:
    """Return the text of a cell; a line break of ours survives on a screen."""
    if isinstance(cell, str):
        return printable(cell)
    if not screen:
        return printable(cell.plain or cell.screen)
    return "\n".join(map(printable, cell.screen.split("\n")))


def lay_out(columns: Sequence[Column], rows: Sequence[Row], width: int) -> Laid:
    """Return a table that is at most so wide, if only the columns that must be shown allow it."""
    texts = [[cell_text(cell, screen=True) for cell in row] for row in rows]
    heads = [column.name for column in columns]
    every = range(len(columns))
    if _needed(_least(columns, heads, texts), every) > width:
        heads = [name.replace(" (", "\n(") for name in heads]
    least = _least(columns, heads, texts)
    shown = _fitting(columns, least, width)
    widths = _widths(columns, heads, texts, least, shown, width)
    kept = [columns[index] for index in shown]

    def lines(cells: Sequence[str]) -> tuple[str, ...]:
        return _lines([cells[index] for index in shown], kept, [widths[index] for index in shown])

    hidden = dict.fromkeys(columns[i].name for i in every if i not in shown and not columns[i].quiet)
    return Laid(lines(heads), tuple(lines(row) for row in texts), tuple(hidden))


def cell_width(text: str) -> int:
    """Return how many cells of a terminal a text takes: two for wide characters, none for combining ones."""
    if text.isascii():
        return len(text)
    return sum(_character_width(character) for character in text)


def _character_width(character: str) -> int:
    if unicodedata.combining(character) or character in "\u200d\ufe0e\ufe0f":
        return 0
    return 2 if unicodedata.east_asian_width(character) in "WF" else 1


def _least(columns: Sequence[Column], heads: Sequence[str], texts: Sequence[Sequence[str]]) -> list[int]:
    """Return how wide each column must be: as its longest line, or its longest word where it may wrap."""
    least = []
    for index, column in enumerate(columns):
        cells = [heads[index], *(row[index] for row in texts)]
        parts = [part for text in cells for part in (text.split() if column.wraps else text.split("\n"))]
        longest = max(map(cell_width, parts), default=0)
        least.append(max(column.least, min(longest, _WIDEST_WORD)) if column.wraps else longest)
    return least


def _needed(widths: Sequence[int], shown: Sequence[int]) -> int:
    """Return the width of a table."""
    return sum(widths[index] + GAP for index in shown) - GAP


def _fitting(columns: Sequence[Column], least: Sequence[int], width: int) -> list[int]:
    """Return which columns there is room for."""
    shown = list(range(len(columns)))
    while _needed(least, shown) > width:
        spare = max(shown, key=lambda index: (columns[index].spare, index))
        if columns[spare].spare == 0:
            break
        shown.remove(spare)
    return shown


def _widths(
    columns: Sequence[Column],
    heads: Sequence[str],
    texts: Sequence[Sequence[str]],
    least: Sequence[int],
    shown: Sequence[int],
    width: int,
) -> list[int]:
    """Return the widths: columns that wrap share the room that is left, each up to what it could use."""
    widths = list(least)
    left = width - _needed(least, shown)
    wanting = [index for index in shown if columns[index].wraps]
    wishes = {
        index: max(
            cell_width(line)
            for text in (heads[index], *(row[index] for row in texts))
            for line in text.split("\n")
        )
        - least[index]
        for index in wanting
    }
    for place, index in enumerate(sorted(wanting, key=lambda index: wishes[index])):
        share = max(0, min(wishes[index], left // (len(wanting) - place)))
        widths[index] += share
        left -= share
    return widths


def _lines(cells: Sequence[str], columns: Sequence[Column], widths: Sequence[int]) -> tuple[str, ...]:
    """Return the lines of one row, without blanks at their ends."""
    wrapped = [_wrap(cell, width) for cell, width in zip(cells, widths, strict=True)]
    lines = []
    for number in range(max(map(len, wrapped))):
        parts = []
        for column, width, own in zip(columns, widths, wrapped, strict=True):
            text = own[number] if number < len(own) else ""
            blanks = " " * max(0, width - cell_width(text))
            parts.append(blanks + text if column.right else text + blanks)
        lines.append((" " * GAP).join(parts).rstrip())
    return tuple(lines)


def _wrap(text: str, width: int) -> list[str]:
    """Return a text in lines of at most so many cells, broken between words, or within one that is too long."""
    lines: list[str] = []
    for part in text.split("\n"):
        line = ""
        for word in part.split(" "):
            joined = f"{line} {word}" if line else word
            if cell_width(joined) <= width:
                line = joined
                continue
            if line:
                lines.append(line)
            while cell_width(word) > width:
                lines.append(_cut(word, width))
                word = word[len(lines[-1]) :]
            line = word
        lines.append(line)
    return lines


def _cut(word: str, width: int) -> str:
    """Return the beginning of a word that fits; one character at least."""
    end = 1
    while end < len(word) and cell_width(word[: end + 1]) <= width:
        end += 1
    return word[:end]
