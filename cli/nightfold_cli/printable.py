"""Text from records, made safe to print.

Labels, notes and names come from anywhere. Control characters could move the cursor or break a line of a
table in two, so they are shown as escapes.
"""

from __future__ import annotations

import unicodedata

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


def _shown(character: str) -> str:
    """Return one character, or its escape."""
    if character.isprintable() or character == _JOINER:
        return character
    if unicodedata.category(character) == "Zs":
        return " "
    return character.encode("unicode_escape").decode("ascii")
