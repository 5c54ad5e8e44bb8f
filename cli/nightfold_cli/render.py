"""What people see: the only module that knows rich.

On a terminal: headings, aligned tables and charts, at its width. Piped: the same tables as tab-separated
lines with a head line, nothing else, so that other programs can read them. With ``--json``: one object. What
is said beside the answer (the store in use, warnings) goes to stderr unless stdout is a terminal. Meaning
never rests on colour.
"""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal, TextIO

from nightfold_cli.canvas import Line
from nightfold_cli.jsonout import document
from nightfold_cli.layout import Cell, Column, Row, cell_text, lay_out
from nightfold_cli.printable import cell_width, paragraph, printable, say

if TYPE_CHECKING:
    from rich.console import Console

_STYLES = {"axis": "dim", "curve": "cyan", "data": "bold", "label": "", "plain": ""}
_WIDEST_TEXT = 100
_ENDLESS = 100_000  # lines are wrapped here or not at all


class Screen:
    """Where the answer goes and how it is dressed.

    Parameters
    ----------
    out, err : TextIO
        Streams of the answer and of what is said beside it.
    mode : 'terminal', 'piped' or 'json'
        How the answer is dressed.
    width : int
        Columns of the terminal.
    """

    def __init__(
        self, out: TextIO, err: TextIO, mode: Literal["terminal", "piped", "json"], width: int
    ) -> None:
        self.out, self.err, self.mode, self.width = out, err, mode, max(20, width)
        self.unicode = _can_show(out, "●⣿█")
        self._encoding = None if self.unicode else out.encoding
        self._console: Console | None = None

    @classmethod
    def here(cls, json: bool) -> Screen:
        """Return the screen of this process."""
        mode: Literal["terminal", "piped", "json"] = (
            "json" if json else "terminal" if sys.stdout.isatty() else "piped"
        )
        return cls(sys.stdout, sys.stderr, mode, shutil.get_terminal_size().columns)

    @property
    def terminal(self) -> bool:
        """Return whether a person is looking."""
        return self.mode == "terminal"

    @property
    def json(self) -> bool:
        """Return whether the answer is one JSON object."""
        return self.mode == "json"

    def answer(self, answer: Mapping[str, Any]) -> None:
        """Write the answer as JSON."""
        self.out.write(document(answer) + "\n")

    def store(self, where: str) -> None:
        """Name the store in use, in one piece so that it can be copied."""
        if self.terminal:
            self._styled("store " + printable(where), "dim")
        else:
            self.say(f"store {where}")

    def say(self, text: str) -> None:
        """Say something that is not the answer, on stderr."""
        say(text, self.err)

    def part(self) -> None:
        """Begin another table, below an empty line in a pipe; on a screen every table does."""
        if self.mode == "piped":
            self.out.write("\n")

    def note(self, text: str) -> None:
        """Add a remark below an answer; only people need it."""
        if self.terminal:
            self._wrapped(text, "", "dim")

    def heading(self, title: str, detail: str = "") -> None:
        """Start a part of the answer; only people need it."""
        if not self.terminal:
            return
        self.gap()
        title, detail = self._spelled(printable(title)), self._spelled(printable(detail))
        if cell_width(title) + cell_width(detail) + 2 <= self.width:
            self._runs([(title, "bold"), ("  " + detail if detail else "", "")])
            return
        self._wrapped(title, "", "bold")
        self._wrapped(detail, "  ", "")

    def text(self, text: str, *, strong: bool = False, indent: str = "") -> None:
        """Write a sentence of the answer, wrapped on a terminal."""
        if self.terminal:
            self._wrapped(text, indent, "bold" if strong else "")
        elif self.mode == "piped":
            self.out.write(indent + printable(text) + "\n")

    def command(self, text: str) -> None:
        """Write a command to copy: on one line, however long."""
        if self.terminal:
            self._styled("  " + printable(text), "")

    def verbatim(self, text: str) -> None:
        """Write a text as it stands, to be copied or kept in a file; a terminal gets no control characters."""
        if self.terminal:
            for line in text.splitlines():
                self._styled(printable(line), "")
        elif self.mode == "piped":
            self.out.write(text if text.endswith("\n") else text + "\n")

    def item(self, head: str, text: str) -> None:
        """Write one item of a list: a head, then a sentence below or beside it."""
        if self.terminal:
            self._wrapped(f"{head}: {text}", "  - ", "", "    ")
        elif self.mode == "piped":
            self.out.write(f"{printable(head)}\t{printable(text)}\n")

    def fields(self, pairs: Iterable[tuple[str, str | Cell]]) -> None:
        """Write names and values below each other."""
        listed = [(name, cell_text(value, screen=self.terminal)) for name, value in pairs]
        if not self.terminal:
            self._tabbed([[name, value] for name, value in listed])
            return
        widest = min(max((len(name) for name, _ in listed), default=0), self.width // 3)
        for name, value in listed:
            head = f"  {name.ljust(widest)}  "
            if len(name) > widest:
                self._wrapped(name, "  ", "")
                head = " " * (widest + 4)
            self._wrapped(value, head, "", " " * (widest + 4))

    def chart(self, lines: Iterable[Line]) -> None:
        """Draw a chart; only people need it."""
        if self.terminal:
            for line in ([(self._spelled(text), role) for text, role in line] for line in lines):
                whole = "".join(text for text, _ in line)
                if cell_width(whole) <= self.width:
                    self._runs([(text, _STYLES[role]) for text, role in line])
                else:
                    self._wrapped(whole, " " * min(4, len(whole) - len(whole.lstrip())), "")

    def table(
        self, columns: Sequence[Column], rows: Iterable[Row], *, empty: str, spaced: bool = False
    ) -> None:
        """Write a table; `empty` is said where there is no row, `spaced` parts rows of several lines."""
        listed = [list(row) for row in rows]
        if not self.terminal:
            self._tabbed([[column.plain_name or column.name for column in columns]])
            self._tabbed([[cell_text(cell, screen=False) for cell in row] for row in listed])
            if not listed:
                self.say(empty)
            return
        if not listed:
            self._wrapped(empty, "", "")
            return
        self.gap()
        self._drawn(columns, listed, spaced)

    def _drawn(self, columns: Sequence[Column], rows: Sequence[Row], spaced: bool) -> None:
        """Draw a table on the terminal with the columns there is room for."""
        heads = [replace(column, name=self._spelled(column.name)) for column in columns]
        cells = [[Cell(self._spelled(cell_text(cell, screen=True))) for cell in row] for row in rows]
        laid = lay_out(heads, cells, self.width)
        for line in laid.head:
            self._styled(line, "bold")
        after_strong = True
        for row, lines in zip(rows, laid.rows, strict=True):
            strong = isinstance(row[0], Cell) and row[0].strong
            if spaced and not after_strong:
                self.gap()
            for line in lines:
                self._styled(line, "bold" if strong else "")
            after_strong = strong
        if laid.hidden:
            self.note(f"no room for: {', '.join(laid.hidden)}")

    def _tabbed(self, rows: Iterable[Sequence[str]]) -> None:
        """Write lines of cells separated by tabs."""
        self.out.writelines("\t".join(row) + "\n" for row in rows)

    def _wrapped(self, text: str, first: str, style: str, rest: str | None = None) -> None:
        """Write a paragraph, wrapped at the width of the screen."""
        text, first = self._spelled(text), self._spelled(first)
        width = min(self.width, _WIDEST_TEXT + len(first))
        for line in paragraph(text, width, first, first if rest is None else rest):
            self._styled(line, style)

    def _styled(self, text: str, style: str) -> None:
        """Write one line in one style."""
        self._runs([(text, style)])

    def _spelled(self, text: str) -> str:
        """Return the text as this output can show it."""
        if self._encoding is None:
            return text
        from nightfold_cli.spelling import spelled

        return spelled(text, self._encoding)

    def gap(self) -> None:
        """Leave a line empty; only people need it."""
        if self.terminal:
            self._runs([])

    def _runs(self, runs: Sequence[tuple[str, str]]) -> None:
        """Write one line made of runs of text."""
        from rich.text import Text

        line = Text(no_wrap=True, overflow="ignore")
        for text, style in runs:
            line.append(text, style or None)
        self._rich().print(line)

    def _rich(self) -> Console:
        """Return the console, made when first needed."""
        if self._console is None:
            from rich.console import Console

            self._console = Console(
                file=self.out,
                width=_ENDLESS,
                highlight=False,
                markup=False,
                emoji=False,
                legacy_windows=False,
                no_color=bool(os.environ.get("NO_COLOR")),
                force_terminal=self.terminal,
            )
        return self._console


def _can_show(stream: TextIO, characters: str) -> bool:
    """Return whether a stream's encoding holds these characters."""
    try:
        characters.encode(getattr(stream, "encoding", None) or "utf-8")
    except (UnicodeEncodeError, LookupError):
        return False
    return True
