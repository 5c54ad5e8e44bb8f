"""Values of parameters and readings, as text."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from nightfold_cli.concise import plain
from nightfold_cli.layout import Cell


def setting(value: Any, unit: str | None = None) -> str:
    """Return a setting with its unit: ``61.25 A``, ``on`` words and texts as they are, ``-`` for none."""
    if value is None or type(value).__name__ in ("NaTType", "NAType"):
        return "-"
    if isinstance(value, bool) or type(value).__name__ in ("bool_", "bool"):
        return "true" if value else "false"
    if isinstance(value, str):
        return value
    number = plain(float(value)) if isinstance(value, float) or hasattr(value, "dtype") else str(value)
    return f"{number} {unit}" if unit else number


def aligned(values: Sequence[Any]) -> list[Cell]:
    """Return settings for one column: numbers with the same decimals on a screen, as they are in a pipe."""
    texts = [setting(value) for value in values]
    if any("e" in text or isinstance(value, str | bool) for text, value in zip(texts, values, strict=True)):
        return [Cell(text) for text in texts]
    decimals = max((len(text.partition(".")[2]) for text in texts), default=0)
    return [Cell(f"{float(value):.{decimals}f}", text) for text, value in zip(texts, values, strict=True)]
