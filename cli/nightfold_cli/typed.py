"""Values of settings as people type them: ``61.3 A``, ``true``, ``x``."""

from __future__ import annotations

import json
import re
from typing import Any

from nightfold_cli.failures import UsageError

_NUMBER = re.compile(
    r"([+-]?(?:(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?|nan|inf))(?:\s+(\S.*)|([^\s\d.,].*))?", re.IGNORECASE
)
_WHOLE = re.compile(r"[+-]?\d+")


def typed_value(name: str, text: str, kind: str | None) -> Any:
    """Return what a person typed for a setting, as a record would say it.

    Parameters
    ----------
    name, text : str
    kind : {'number', 'text', 'truth'} or None
        Of the parameter in the store; None where it has none of that name.

    Raises
    ------
    UsageError
        If a number or a truth is wanted and something else was typed.
    """
    if kind == "number":
        match = _NUMBER.fullmatch(text.strip().replace("\N{MINUS SIGN}", "-"))
        if match is None:
            raise UsageError(
                f"--set {name}: found {text!r}, wanted a number, as in {name}=61.3 or '{name}=61.3 A'"
            )
        digits, unit = match[1], match[2] or match[3]
        number = int(digits) if _WHOLE.fullmatch(digits) else float(digits)
        return {"value": number, "unit": unit} if unit else number
    if kind == "truth":
        if text.strip().lower() not in ("true", "false"):
            raise UsageError(f"--set {name}: found {text!r}, wanted true or false")
        return text.strip().lower() == "true"
    return _ramp(text) or text


def _ramp(text: str) -> list[Any] | None:
    """Return a list of numbers, which the store keeps as text; None for any other text."""
    try:
        found = json.loads(text)
    except ValueError:
        return None
    plain = isinstance(found, list) and all(
        isinstance(item, int | float) and item is not True for item in found
    )
    return found if plain and found else None
