"""Canonical form of settings and readings: what is equal is stored equal, and nothing is lost.

A number is a float, and where a float cannot say it (NaN, infinities, whole numbers beyond 2^53) a text beside it:
SQLite would turn NaN into NULL, and NaN would differ from itself for ever.
"""

from __future__ import annotations

import hashlib
import json
import math
import numbers
import operator
from collections.abc import Mapping
from typing import Any, Literal, NamedTuple

import pydantic_core

from nightfold.errors import RecordError
from nightfold.records import clean_text, shorten

Kind = Literal["number", "text", "truth"]
_MASK = (1 << 128) - 1
_WANTED = "a number, text, true or false, a list of numbers, or an object with value and unit"


class Value(NamedTuple):
    """One setting in canonical form.

    Attributes
    ----------
    kind : {'number', 'text', 'truth'}
    num : float or None
        The number; 1.0 or 0.0 for a truth; None for text and for NaN and infinities.
    exact : str or None
        The text; or the number in decimal where a float cannot hold it (``nan``, ``inf``, ``9007199254740993``).
    """

    kind: Kind
    num: float | None
    exact: str | None

    @property
    def token(self) -> str:
        """A text that is equal for equal values, whatever their form was (61 and 61.0; never 1 and true)."""
        return token_of(self.kind, self.num, self.exact)

    @property
    def plain(self) -> float | int | str | bool:
        """The value as Python has it."""
        return plain_value(self.kind, self.num, self.exact)


class ReadValue(NamedTuple):
    """One reading in canonical form: value, standard uncertainty, and why there is no value (``null``, ``nan`` …)."""

    value: float | None
    stderr: float | None
    state: str | None


def token_of(kind: str, num: float | None, exact: str | None) -> str:
    """Return the canonical token of a stored value."""
    return f"{kind[1]}:{exact if exact is not None else repr(num)}"


def plain_value(kind: str, num: float | None, exact: str | None) -> float | int | str | bool:
    """Return a stored value as Python has it."""
    if kind == "text":
        return exact or ""
    if kind == "truth":
        return bool(num)
    if exact is None:
        return math.nan if num is None else num
    return float(exact) if exact in ("nan", "inf", "-inf") else int(exact)


def number_value(raw: Any) -> Value | None:
    """Return the canonical form of a number, numpy scalars included; None if it is no number."""
    if type(raw) is float and math.isfinite(raw):
        return Value("number", raw + 0.0, None)  # adding 0.0 turns -0.0 into 0.0
    if getattr(raw, "ndim", None) == 0:
        raw = raw.item()  # a numpy scalar, or an array without dimensions
    try:
        if isinstance(raw, numbers.Integral) or hasattr(raw, "__index__"):
            whole = operator.index(raw)
            return Value("number", float(whole), None if float(whole) == whole else str(whole))
        if isinstance(raw, numbers.Real) or hasattr(raw, "as_integer_ratio"):
            number = float(raw)
            if math.isfinite(number):
                return Value("number", number + 0.0, None)
            return Value("number", None, repr(number))
    except (OverflowError, TypeError, ValueError):  # beyond a float, or a number in name only
        pass
    return None


def setting_value(raw: Any, field: str) -> tuple[Value, str | None] | None:
    """Return canonical value and stated unit of a setting as a record states it; None for null (not stated).

    Raises
    ------
    RecordError
        If the setting is none of the forms of the shot record.
    """
    unit = None
    value = raw
    if isinstance(raw, Mapping):
        if not raw.keys() <= {"value", "unit"} or "value" not in raw:
            raise RecordError(field, shorten(dict(raw)), "an object with value and unit, nothing else")
        value, unit = raw["value"], raw.get("unit")
        if unit is not None and type(unit) is not str:
            raise RecordError(f"{field}.unit", shorten(unit), "a unit as text")
    if value is None:
        return None
    canonical = _canonical(value, field)
    if unit is not None and canonical.kind != "number":
        raise RecordError(field, shorten(raw), "a unit only beside a number")
    return canonical, unit


def _canonical(value: Any, field: str) -> Value:
    if isinstance(value, str):
        try:
            return Value("text", None, clean_text(str(value)))
        except ValueError as problem:
            raise RecordError(field, shorten(value), str(problem)) from None
    if isinstance(value, bool) or type(value).__name__ in ("bool_", "bool"):
        return Value("truth", 1.0 if value else 0.0, None)
    if isinstance(value, (list, tuple)) or (hasattr(value, "tolist") and getattr(value, "ndim", 0) == 1):
        return _ramp(list(value), field)
    number = number_value(value)
    if number is None:
        raise RecordError(field, shorten(value), _WANTED)
    return number


def _ramp(values: list[Any], field: str) -> Value:
    plain = []
    for item in values:
        number = None if isinstance(item, bool) else number_value(item)
        if number is None:
            raise RecordError(field, shorten(item), "numbers only in a list")
        whole = number.plain
        plain.append(
            int(whole) if isinstance(whole, float) and whole.is_integer() and abs(whole) < 1e15 else whole
        )
    return Value("text", None, json.dumps(plain, separators=(",", ":")))


def reading_value(raw: Any, field: str) -> tuple[ReadValue, str | None]:
    """Return canonical reading and stated unit of an observable as a record states it.

    Raises
    ------
    RecordError
        If it is neither a number, null, nor an object with value, stderr and unit, or the stderr is negative.
    """
    value, stderr, unit = raw, None, None
    if type(raw) is dict and len(raw) == 2 and "stderr" in raw:
        number, error = raw.get("value"), raw["stderr"]
        if type(number) is float and type(error) is float and error >= 0 and math.isfinite(number + error):
            return ReadValue(number + 0.0, error + 0.0, None), None
    if isinstance(raw, Mapping):
        if not raw.keys() <= {"value", "stderr", "unit"} or "value" not in raw:
            raise RecordError(
                field, shorten(dict(raw)), "an object with value, stderr and unit, nothing else"
            )
        value, stderr, unit = raw["value"], raw.get("stderr"), raw.get("unit")
    if unit is not None and type(unit) is not str:
        raise RecordError(f"{field}.unit", shorten(unit), "a unit as text")
    if value is None:
        return ReadValue(None, None, "null"), unit
    number = None if isinstance(value, bool) else number_value(value)
    if number is None:
        raise RecordError(field, shorten(value), "a number or null")
    error = None
    if stderr is not None:
        error = _stderr(stderr, f"{field}.stderr")
    if number.num is None:
        return ReadValue(None, error, number.exact), unit
    return ReadValue(number.num, error, None), unit


def _stderr(raw: Any, field: str) -> float | None:
    number = None if isinstance(raw, bool) else number_value(raw)
    if number is None or (number.num is not None and number.num < 0) or number.exact == "-inf":
        raise RecordError(field, shorten(raw), "a standard uncertainty, a number of at least 0")
    if number.num is None:
        return None if number.exact == "nan" else math.inf
    return number.num


def hash_setting(name: str, token: str) -> int:
    """Return the 128-bit hash of one setting; the sum over a shot's settings is its digest, whatever their order."""
    return int.from_bytes(hashlib.blake2b(f"{name}\0{token}".encode(), digest_size=16).digest(), "little")


def digest_of_sum(total: int) -> bytes:
    """Return the 16 bytes of a sum of setting hashes."""
    return (total & _MASK).to_bytes(16, "little")


def digest_text(*parts: str) -> bytes:
    """Return a 16-byte digest of texts, in order; the same for ever (uids are made of it)."""
    return hashlib.blake2b("\0".join(parts).encode("utf-8", "surrogatepass"), digest_size=16).digest()


def digest_content(content: Any) -> bytes:
    """Return a 16-byte digest of plain values: equal for equal content, to tell what is known already."""
    text = pydantic_core.to_json(content, inf_nan_mode="constants", fallback=str)
    return hashlib.blake2b(text, digest_size=16).digest()
