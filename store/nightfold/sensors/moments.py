"""One line of sensor readings: a moment of a machine, and what its sensors showed; checked, nothing written yet."""

from __future__ import annotations

import difflib
import numbers
from collections.abc import Mapping
from functools import lru_cache
from typing import TYPE_CHECKING, Any, NamedTuple

from nightfold.errors import RecordError
from nightfold.records import clean_name, shorten
from nightfold.timestamps import parse_moment

if TYPE_CHECKING:
    from nightfold.ledger.names import MachineNames

_FIELDS = ("format", "machine", "at", "readings")
_KNOWN = frozenset(_FIELDS)
_READING = frozenset(("value", "unit"))
_WANTED = "a number, or an object with value and unit"
_TIME = "an ISO 8601 time with an offset, such as 2026-10-05T21:14:03+02:00"


class Stated(NamedTuple):
    """One reading as it was stated: name, value in the unit stated, that unit (None for a bare number)."""

    name: str
    value: float
    unit: str | None


def machine_of(record: Mapping[str, Any], default: str | None) -> str:
    """Return the machine of a record of readings, whose fields are then known to be right.

    Raises
    ------
    RecordError
        Naming the field at fault.
    """
    if not isinstance(record, Mapping):
        raise RecordError("", shorten(record), "one JSON object a line")
    if not record.keys() <= _KNOWN:
        field = next(key for key in record if key not in _KNOWN)
        near = difflib.get_close_matches(str(field), _FIELDS, 1)
        hint = f"no such field; is {near[0]!r} meant?" if near else "one of " + ", ".join(_FIELDS)
        raise RecordError(str(field), shorten(record[field]), hint)
    version = record.get("format", 1)
    if version != 1 or type(version) is bool:
        raise RecordError("format", shorten(version), "format 1")
    machine = record.get("machine", default)
    if machine is None:
        raise RecordError("machine", "nothing", "the name of the machine, here or by --machine (machine=)")
    return _name(machine, "machine")


def at_us_of(record: Mapping[str, Any], machine: MachineNames) -> int:
    """Return the moment of a record, in microseconds since 1970.

    Raises
    ------
    RecordError
        If there is none, it cannot be read, carries no offset, or is ambiguous.
    """
    at = record.get("at")
    if at is None:
        raise RecordError("at", "nothing", _TIME)
    try:
        return parse_moment(at, machine.naive_zone)
    except ValueError as problem:
        raise RecordError("at", shorten(at if isinstance(at, str) else str(at)), str(problem)) from None


def readings_of(record: Mapping[str, Any]) -> list[Stated]:
    """Return the readings of a record; one that is null says nothing and is left out.

    Raises
    ------
    RecordError
        Naming the sensor at fault.
    """
    readings = record.get("readings")
    if not isinstance(readings, Mapping):
        found = "nothing" if readings is None else shorten(readings)
        raise RecordError("readings", found, 'an object such as {"room_temperature": 21.3}')
    found_ones: dict[str, Stated] = {}
    for key, raw in readings.items():
        value, unit = raw, None
        if type(raw) is dict or (type(raw) is not float and isinstance(raw, Mapping)):
            value, unit = _parts(raw, key)
        if value is None:
            continue
        name = _name(key, "readings")
        if name in found_ones:
            raise RecordError(f"readings.{name}", "the same name twice", "each sensor once")
        found_ones[name] = Stated(name, _number(value, name), unit)
    return list(found_ones.values())


def _parts(raw: Mapping[str, Any], name: Any) -> tuple[Any, str | None]:
    """Return value and unit of a reading stated with its unit."""
    if "value" not in raw or not raw.keys() <= _READING:
        raise RecordError(f"readings.{name}", shorten(dict(raw)), _WANTED)
    unit = raw.get("unit")
    if unit is not None and not isinstance(unit, str):
        raise RecordError(f"readings.{name}.unit", shorten(unit), "a unit in quotes")
    return raw["value"], unit


def _number(value: Any, name: str) -> float:
    """Return a reading as a float, which must hold it exactly; -0.0 is 0.0."""
    if type(value) is float:
        return value + 0.0
    field = f"readings.{name}"
    if isinstance(value, bool) or not isinstance(value, numbers.Real):
        raise RecordError(field, shorten(value), _WANTED)
    try:
        number = float(value)
    except OverflowError:
        number = float("inf")
    if isinstance(value, numbers.Integral) and number != value:
        raise RecordError(field, shorten(value), "a number that a float holds exactly; whole ones up to 2^53")
    return number + 0.0


def _name(text: Any, field: str) -> str:
    """Return a clean name, or say that it is none."""
    try:
        return _clean(text) if type(text) is str else clean_name(text)
    except ValueError as problem:
        raise RecordError(field, shorten(text), str(problem)) from None


_clean = lru_cache(maxsize=4096)(clean_name)  # the same few names come with every record
