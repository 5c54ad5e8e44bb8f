"""Text from records, made safe to print.

Labels, notes and names come from anywhere. Control characters could move the cursor or break a line of a
table in two, so they are shown as escapes.
"""

from __future__ import annotations

import shutil
import unicodedata
from typing import TextIO

_JOINER = "\u200d"  # holds emoji together, harmless


def printable(text: object) -> str:
    r"""Return the text with control characters, line breaks and bidirectional marks shown as escapes.

    Examples
    --------
    >>> printable("loss\tcoarse\x1b[2J")
    'loss\\tcoarse\\x1b[2J'
    """
    whole = str(text)
    if whole.isprintable():
        return whole
    return "".join(_shown(character) for character in whole)


def paragraph(text: str, width: int, first: str = "", rest: str = "") -> list[str]:
    """Return a text as lines of at most so many characters, the first with one indent, the rest with another."""
    lines = []
    for part in text.split("\n"):
        begun = max(1, width - cell_width(first))
        body = wrap(printable(part).strip(" "), max(1, width - cell_width(rest)), begun)
        lines += [(first + body[0]).rstrip(), *((rest + line).rstrip() for line in body[1:])]
    return lines


def cell_width(text: str) -> int:
    """Return how many cells of a terminal a text takes: two for wide characters, none for combining ones."""
    if text.isascii():
        return len(text)
    return sum(_character_width(character) for character in text)


def wrap(text: str, width: int, first: int | None = None) -> list[str]:
    """Return a text in lines of at most so many cells, broken between words, or within one that is too long.

    Parameters
    ----------
    text : str
        Without line breaks.
    width : int
        Room in a line.
    first : int, optional
        Room in the first line, where it differs.
    """
    lines: list[str] = []
    line, room = "", width if first is None else first
    for word in text.split(" "):
        joined = f"{line} {word}" if line else word
        if cell_width(joined) <= room:
            line = joined
            continue
        if line:
            lines.append(line)
            room = width
        while cell_width(word) > room:
            lines.append(_cut(word, room))
            word = word[len(lines[-1]) :]
            room = width
        line = word
    return [*lines, line]


def say(text: str, stream: TextIO) -> None:
    """Say something that is not the answer: on one line in a pipe, wrapped on a terminal."""
    whole = f"nightfold: {printable(text)}"
    if stream.isatty():
        whole = "\n".join(paragraph(whole, shutil.get_terminal_size().columns, rest="  "))
    stream.write(whole + "\n")


def _character_width(character: str) -> int:
    """Return how many cells one character takes."""
    if unicodedata.combining(character) or character in "\u200d\ufe0e\ufe0f":
        return 0
    return 2 if unicodedata.east_asian_width(character) in "WF" else 1


def _cut(word: str, width: int) -> str:
    """Return the beginning of a word that fits; one character at least."""
    end = 1
    while end < len(word) and cell_width(word[: end + 1]) <= width:
        end += 1
    return word[:end]


def _shown(character: str) -> str:
    """Return one character, or its escape."""
    if character.isprintable() or character == _JOINER:
        return character
    if unicodedata.category(character) == "Zs":
        return " "
    return character.encode("unicode_escape").decode("ascii")
