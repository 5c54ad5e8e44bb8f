"""Values of settings as people type them: ``61.3 A``, ``true``, ``x``."""

from __future__ import annotations

import json
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from nightfold_cli.failures import UsageError

_NUMBER = re.compile(
    r"([+-]?(?:(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?|nan|inf))(?:\s+(\S.*)|([^\s\d.,].*))?", re.IGNORECASE
)
_WHOLE = re.compile(r"[+-]?\d+")


@dataclass(frozen=True, slots=True)
class Typed:
    """A setting as it was typed: ``=``, or by how much it moves (``*=``, ``+=``)."""

    name: str
    sign: str
    text: str

    def value(self, kind: str | None) -> Any:
        """Return what `Store.correct` takes; `kind` is that of the parameter in the store.

        Raises
        ------
        UsageError
            If a number or a truth is wanted and something else was typed.
        """
        if self.sign == "=":
            return typed_value(self.name, self.text, kind)
        stated = typed_value(self.name, self.text, "number")
        if self.sign == "+=":
            return (
                {"plus": stated["value"], "unit": stated["unit"]}
                if isinstance(stated, dict)
                else {"plus": stated}
            )
        if isinstance(stated, dict):
            raise UsageError(
                f"--set {self.name}: found {self.text!r}, wanted a factor without unit, as in '{self.name}*=1.2'"
            )
        return {"times": stated}


def typed_setting(given: Sequence[str]) -> list[Typed]:
    """Return what was typed, each name once.

    Raises
    ------
    UsageError
    """
    stated: dict[str, Typed] = {}
    for text in given:
        name, equals, value = text.partition("=")
        sign = "="
        if name.endswith(("*", "+")):
            name, sign = name[:-1], f"{name[-1]}="
        name = name.strip()
        if not equals or not name or not value.strip():
            raise UsageError(f"--set: found {text!r}, wanted NAME=VALUE, as in 'coil_current=61.3 A'")
        if name in stated:
            raise UsageError(f"--set {name}: found it twice, wanted one value")
        stated[name] = Typed(name, sign, value)
    return list(stated.values())


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
