"""Values of parameters and readings, as text."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from nightfold.concise import plain
from nightfold_cli.layout import Cell

ENOUGH, FULL = 6, 12  # significant digits of a number without stderr on a screen, and of one in a pipe


def setting(value: Any, unit: str | None = None, digits: int = FULL) -> str:
    """Return a setting with its unit: ``61.25 A``, words as they are, ``-`` for none.

    Parameters
    ----------
    value : float, int, str, bool or None
    unit : str, optional
    digits : int
        Significant digits at most, of what is no whole number.
    """
    if value is None or type(value).__name__ in ("NaTType", "NAType"):
        return "-"
    if isinstance(value, bool) or type(value).__name__ in ("bool_", "bool"):
        return "true" if value else "false"
    if isinstance(value, str):
        return value
    number = (
        plain(float(value), digits) if isinstance(value, float) or hasattr(value, "dtype") else str(value)
    )
    return f"{number} {unit}" if unit else number


def aligned(values: Sequence[Any]) -> list[Cell]:
    """Return settings for one column: on a screen with as many decimals as tell them apart, in a pipe in full.

    Six digits are enough where no two different settings look the same with them.
    """
    full = [setting(value) for value in values]
    apart = len(set(full))
    digits = next(
        n
        for n in range(ENOUGH, FULL + 1)
        if n == FULL or len({setting(value, digits=n) for value in values}) == apart
    )
    texts = [setting(value, digits=digits) for value in values]
    numbers = [text for text, value in zip(texts, values, strict=True) if _is_number(value, text)]
    decimals = max((len(text.partition(".")[2]) for text in numbers), default=0)
    if any("e" in text for text in numbers):
        return [Cell(text, plain) for text, plain in zip(texts, full, strict=True)]
    return [
        Cell(f"{float(value):.{decimals}f}" if _is_number(value, text) else text, plain)
        for text, plain, value in zip(texts, full, values, strict=True)
    ]


def _is_number(value: Any, text: str) -> bool:
    """Return whether a setting is a finite number."""
    return text not in ("-", "true", "false", "nan", "inf", "-inf") and not isinstance(value, str)
