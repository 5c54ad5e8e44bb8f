"""Tables in columns: what there is room for, and how the cells are wrapped and aligned.

Pure text; `render` prints it. No line is ever wider than the screen: heads are broken in two, cells that may wrap are
wrapped, columns that may be spared go, and where all that does not suffice a row goes on in a further line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from nightfold_cli.printable import cell_width, printable, wrap

GAP = 2
_WIDEST_WORD = 24
_INDENT = "    "


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
    """Return a table that is at most so wide."""
    texts = [[cell_text(cell, screen=True) for cell in row] for row in rows]
    heads = [column.name for column in columns]
    every = range(len(columns))
    if _needed(_least(columns, heads, texts, width), every) > width:
        heads = [name.replace(" (", "\n(") for name in heads]
    least = _least(columns, heads, texts, width)
    shown = _fitting(columns, least, width)
    if _needed(least, shown) > width:
        columns = [column if column.right else replace(column, wraps=True) for column in columns]
        least = _least(columns, heads, texts, width)
    groups = _groups(shown, least, width)
    rooms = [width] + [width - len(_INDENT)] * (len(groups) - 1)
    widths = [
        _widths(columns, heads, texts, least, group, room) for group, room in zip(groups, rooms, strict=True)
    ]

    def lines(cells: Sequence[str]) -> tuple[str, ...]:
        return tuple(
            indent + line
            for group, own, indent in zip(groups, widths, [""] + [_INDENT] * len(groups), strict=False)
            for line in _lines(
                [cells[i] for i in group], [columns[i] for i in group], [own[i] for i in group]
            )
        )

    hidden = dict.fromkeys(columns[i].name for i in every if i not in shown and not columns[i].quiet)
    return Laid(lines(heads), tuple(lines(row) for row in texts), tuple(hidden))


def _groups(shown: Sequence[int], least: Sequence[int], width: int) -> list[list[int]]:
    """Return the columns that stand side by side, for each line of a row: one line where there is room for all."""
    groups: list[list[int]] = [[]]
    for index in shown:
        room = width if len(groups) == 1 else width - len(_INDENT)
        if groups[-1] and _needed(least, [*groups[-1], index]) > room:
            groups.append([])
        groups[-1].append(index)
    return groups


def _least(
    columns: Sequence[Column], heads: Sequence[str], texts: Sequence[Sequence[str]], width: int
) -> list[int]:
    """Return how wide each column must be: as its longest line, or its longest word where it may wrap."""
    most = width - len(_INDENT)
    least = []
    for index, column in enumerate(columns):
        cells = [heads[index], *(row[index] for row in texts)]
        parts = [part for text in cells for part in (text.split() if column.wraps else text.split("\n"))]
        longest = max(map(cell_width, parts), default=0)
        wanted = max(column.least, min(longest, _WIDEST_WORD)) if column.wraps else longest
        least.append(min(wanted, most))
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
    wrapped = [
        [line for part in cell.split("\n") for line in wrap(part, width)]
        for cell, width in zip(cells, widths, strict=True)
    ]
    lines = []
    for number in range(max(map(len, wrapped))):
        parts = []
        for column, width, own in zip(columns, widths, wrapped, strict=True):
            text = own[number] if number < len(own) else ""
            blanks = " " * max(0, width - cell_width(text))
            parts.append(blanks + text if column.right else text + blanks)
        lines.append((" " * GAP).join(parts).rstrip())
    return tuple(lines)
