"""A grid of characters to draw on, with braille dots for fine lines and plain characters for the rest.

A braille character holds two by four dots, so a curve drawn with it is eight times finer than the grid;
marks of data are whole characters and lie on top. Where the output cannot show braille, everything is ASCII.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import groupby
from typing import Literal

Role = Literal["axis", "curve", "data", "label", "plain"]
Line = list[tuple[str, Role]]

_DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))
_BRAILLE = 0x2800


@dataclass(frozen=True, slots=True)
class Glyphs:
    """The characters a chart is made of."""

    mark: str
    flagged: str
    bar: str
    vertical: str
    tick: str
    horizontal: str
    below: str
    corner: str
    zero: str
    shades: str
    marks: str
    bars: str


UNICODE = Glyphs("●", "×", "│", "│", "┤", "─", "┬", "└", "┈", " ░▒▓█", "●○▲△", "│╎│╎")
ASCII = Glyphs("o", "x", "|", "|", "+", "-", "+", "+", "-", " .:+#", "o*#@", "|:|:")
MOST_SERIES = len(UNICODE.marks)
"""Series of points that a chart can tell apart by their marks."""


class Canvas:
    """Characters and dots on a grid of cells; row 0 is at the top.

    Parameters
    ----------
    width, height : int
        Size in cells.
    fine : bool
        Whether lines may be drawn with braille dots.
    """

    def __init__(self, width: int, height: int, *, fine: bool) -> None:
        self.width, self.height, self.fine = width, height, fine
        self._dots: dict[tuple[int, int], int] = {}
        self._marks: dict[tuple[int, int], tuple[str, Role]] = {}

    @property
    def dots_across(self) -> int:
        """Return how many dots fit into the width."""
        return self.width * 2 if self.fine else self.width

    @property
    def dots_down(self) -> int:
        """Return how many dots fit into the height."""
        return self.height * 4 if self.fine else self.height

    def dot(self, across: int, down: int) -> None:
        """Set one dot, counted in dots from the top left; outside the canvas nothing happens."""
        if not (0 <= across < self.dots_across and 0 <= down < self.dots_down):
            return
        if not self.fine:
            self._dots[across, down] = 1
            return
        cell = (across // 2, down // 4)
        self._dots[cell] = self._dots.get(cell, 0) | _DOTS[down % 4][across % 2]

    def put(self, column: int, row: int, character: str, role: Role) -> None:
        """Put a character into a cell, on top of dots and of what was there."""
        if 0 <= column < self.width and 0 <= row < self.height:
            self._marks[column, row] = (character, role)

    def free(self, column: int, row: int) -> bool:
        """Return whether a cell holds no mark."""
        return (column, row) not in self._marks

    def line(self, row: int) -> Line:
        """Return one row as runs of text with one role each."""
        cells = [self._cell(column, row) for column in range(self.width)]
        return [("".join(text for text, _ in run), role) for role, run in groupby(cells, key=lambda c: c[1])]

    def _cell(self, column: int, row: int) -> tuple[str, Role]:
        """Return the character of one cell and its role."""
        if (column, row) in self._marks:
            return self._marks[column, row]
        pattern = self._dots.get((column, row), 0)
        if not pattern:
            return (" ", "plain")
        return (chr(_BRAILLE + pattern) if self.fine else ".", "curve")
