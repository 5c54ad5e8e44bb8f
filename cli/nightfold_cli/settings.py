"""Values of parameters and readings, as text."""

from __future__ import annotations

from typing import Any

from nightfold_cli.concise import plain


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
