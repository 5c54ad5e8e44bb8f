"""Text from records, made safe to print.

Labels, notes and names come from anywhere. Control characters could move the cursor or break a line of a
table in two, so they are shown as escapes.
"""

from __future__ import annotations

import shutil
import textwrap
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
        lines += textwrap.wrap(
            printable(part), width, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False
        ) or [first.rstrip()]
    return lines


def say(text: str, stream: TextIO) -> None:
    """Say something that is not the answer: on one line in a pipe, wrapped on a terminal."""
    whole = f"nightfold: {printable(text)}"
    if stream.isatty():
        whole = "\n".join(paragraph(whole, shutil.get_terminal_size().columns, rest="  "))
    stream.write(whole + "\n")


def _shown(character: str) -> str:
    """Return one character, or its escape."""
    if character.isprintable() or character == _JOINER:
        return character
    if unicodedata.category(character) == "Zs":
        return " "
    return character.encode("unicode_escape").decode("ascii")
