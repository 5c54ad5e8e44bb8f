"""Keys of a machine card, checked one by one, with the line at which a fault stands."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Iterable, Iterator, Mapping
from datetime import time
from typing import Any, Literal, TypeVar

from nightfold.errors import CardError, NotFound, UnitError
from nightfold.records import clean_name, clean_text, shorten
from nightfold.timestamps import find_zone

TIME_ZONE = "Europe/Vienna"
Kind = Literal["number", "text", "truth"]
Wanted = TypeVar("Wanted")
_KINDS: Mapping[str | None, Kind] = {"number": "number", "text": "text", "truth": "truth"}
_ISOTOPE = re.compile(r"[1-9][0-9]{0,2}[A-Z][a-z]?")
_CLOCK = re.compile(r"[0-2][0-9]:[0-5][0-9](:[0-5][0-9])?")
_SPAN = re.compile(r"\s*([0-9.eE+-]+)\s*([^0-9\s].*?)\s*")
_KEY = re.compile(r"""\s*("(?:[^"\\]|\\.)*"|'[^']*'|[A-Za-z0-9_-]+)\s*""")


class Table:
    """One table of a card: its keys can be asked for as what they should be.

    Each method returns the value of a key, None where it is absent, and raises `CardError` where it is wrong.

    Parameters
    ----------
    source : str
        The file, for messages.
    text : str
        The whole card, to find lines in.
    content : mapping
        The table as decoded.
    path : tuple of str
        Where the table stands in the card, as it is written there.
    """

    def __init__(
        self, source: str, text: str, content: Mapping[str, Any], path: tuple[str, ...] = ()
    ) -> None:
        self._source, self._text, self._content, self._path = source, text, content, path

    def error(self, key: str | tuple[str, ...], found: str, wanted: str) -> CardError:
        """Return the error for a key of this table, or for one deeper down."""
        path = (*self._path, *((key,) if isinstance(key, str) else key))
        line = _line_of(self._text, path)
        place = f"{self._source}:{line}" if line else self._source
        return CardError(f"{place}: {'.'.join(path)}: found {found}, wanted {wanted}")

    def check_keys(self, *known: str) -> None:
        """Refuse a key that is none of those known."""
        for key in self._content:
            if key not in known:
                near = difflib.get_close_matches(key, known, 1)
                hint = f"; is {near[0]!r} meant?" if near else ""
                raise self.error(key, "a key that is not known", f"one of {', '.join(known)}{hint}")

    def near(self, name: str, names: Iterable[str]) -> str:
        """Return a hint at the names that look like one that is wrong."""
        near = difflib.get_close_matches(name, list(names), 3) or sorted(names)[:6]
        return f", such as {', '.join(near)}" if near else "; it has none yet"

    def entries(self, key: str) -> Iterator[tuple[str, Table]]:
        """Yield names in Unicode form NFC and the tables behind them; a name given twice is refused."""
        content = self._typed(key, dict, "a table of names") or {}
        seen: set[str] = set()
        for raw, inner in content.items():
            place = (key, raw)
            name = self._convert(place, raw, clean_name)
            if name in seen:
                raise self.error(place, "the name a second time", "each name once")
            seen.add(name)
            if not isinstance(inner, dict):
                raise self.error(place, shorten(inner), f"a table: [{key}.{raw}]")
            yield name, Table(self._source, self._text, inner, place)

    def name(self, key: str) -> str | None:
        """Return a name in Unicode form NFC."""
        value = self._typed(key, str, "a name in quotes")
        return None if value is None else self._convert(key, value, clean_name)

    def text(self, key: str) -> str | None:
        """Return a text in Unicode form NFC."""
        value = self._typed(key, str, "a text in quotes")
        return None if value is None else self._convert(key, value, clean_text)

    def truth(self, key: str) -> bool | None:
        """Return a truth value."""
        return self._typed(key, bool, "true or false")

    def species(self, key: str) -> tuple[str, ...]:
        """Return isotopes, such as ``39K``: mass number and symbol."""
        wanted = 'a list of isotopes, such as ["39K", "87Rb"]'
        value = self._typed(key, list, wanted) or []
        for item in value:
            if not isinstance(item, str) or not _ISOTOPE.fullmatch(item):
                raise self.error(key, shorten(item), wanted)
        return tuple(value)

    def zone(self, key: str) -> str | None:
        """Return the name of an IANA time zone."""
        value = self._typed(key, str, f'an IANA time zone, such as "{TIME_ZONE}"')
        if value is None:
            return None
        try:
            find_zone(value)
        except NotFound as problem:
            raise self.error(key, repr(value), _zone_wanted(value)) from problem
        return value

    def clock(self, key: str) -> time | None:
        """Return a time of day, written ``"12:00"`` or ``12:00:00``."""
        value = self._content.get(key)
        if value is None or isinstance(value, time):
            return value
        if isinstance(value, str) and _CLOCK.fullmatch(value) and value < "24":
            return time.fromisoformat(value)
        raise self.error(key, shorten(value), 'a time of day, such as "12:00"')

    def seconds(self, key: str) -> float | None:
        """Return a span of time in seconds, written as a number of them or as a text with a unit."""
        value = self._content.get(key)
        if value is None:
            return None
        wanted = 'a time, such as "24 h", or a number of seconds, at least 0'
        span = read_span(value)
        if span is None or not 0 <= span < math.inf:
            raise self.error(key, shorten(value), wanted)
        return span

    def unit(self, key: str) -> str | None:
        """Return a unit that is known; the empty text stands for a pure number."""
        value = self._typed(key, str, 'a unit in quotes, such as "A"')
        if value is None:
            return None
        from nightfold.units import parse_unit

        try:
            return parse_unit(value)
        except UnitError as problem:
            raise self.error(
                key, repr(value), "a unit that is known, such as A, ms, MHz, nK, G, atoms"
            ) from problem

    def limits(self, key: str) -> tuple[float, float] | None:
        """Return a range as its lower and upper limit; ``inf`` leaves a side open."""
        wanted = "[lowest, highest], such as [0, 120]"
        value = self._typed(key, list, wanted)
        if value is None:
            return None
        if len(value) != 2 or not all(type(limit) in (int, float) for limit in value):
            raise self.error(key, shorten(value), wanted)
        low, high = float(value[0]), float(value[1])
        if not low < high:
            raise self.error(key, shorten(value), f"{wanted}, the lower one first")
        return low, high

    def kind(self, key: str) -> Kind | None:
        """Return the kind of a parameter."""
        wanted = '"number", "text" or "truth"'
        value = self._typed(key, str, wanted)
        if value is None or value in _KINDS:
            return _KINDS.get(value)
        raise self.error(key, shorten(value), wanted)

    def _typed(self, key: str, wanted_type: type[Wanted], wanted: str) -> Wanted | None:
        """Return the value of a key if it has the type, None if the key is absent."""
        value = self._content.get(key)
        if value is None or type(value) is wanted_type:
            return value
        raise self.error(key, shorten(value), wanted)

    def _convert(self, key: str | tuple[str, ...], value: str, convert: Callable[[Any], str]) -> str:
        """Return a text made clean, or say what it should be."""
        try:
            return convert(value)
        except ValueError as problem:
            raise self.error(key, shorten(value), str(problem)) from problem


def _zone_wanted(value: str) -> str:
    """Return what to write instead of a zone that does not exist."""
    from zoneinfo import available_timezones

    near = difflib.get_close_matches(value, sorted(available_timezones()), 3)
    return f"an IANA time zone, such as {', '.join(near) or TIME_ZONE}"


def read_span(value: Any) -> float | None:
    """Return seconds from a number of them or from a text such as ``24 h``; None if it is neither."""
    if type(value) in (int, float):
        return float(value)
    parts = _SPAN.fullmatch(value) if isinstance(value, str) else None
    if parts is None:
        return None
    from nightfold.units import convert

    try:
        return convert(float(parts[1]), parts[2], "s")
    except (ValueError, UnitError):
        return None


def _line_of(text: str, path: tuple[str, ...]) -> int | None:
    """Return the line on which a key stands, or failing that its table; None where neither is found.

    Found by the usual forms, ``[table.name]`` and ``key =``; inside an inline table its first line is given.
    """
    table: tuple[str, ...] = ()
    best, depth = None, 0
    for number, line in enumerate(text.split("\n"), start=1):
        stripped = line.strip()
        if stripped.startswith("["):
            table = here = _split_key(stripped.lstrip("["))
        else:
            keys = _split_key(stripped)
            here = (*table, *keys) if keys else ()
        if len(here) > depth and here == path[: len(here)]:
            best, depth = number, len(here)
    return best


def _split_key(text: str) -> tuple[str, ...]:
    """Return the parts of a dotted key that a text begins with."""
    parts: list[str] = []
    position = 0
    while match := _KEY.match(text, position):
        part = match[1]
        parts.append(part[1:-1] if part[0] in "\"'" else part)
        position = match.end()
        if text[position : position + 1] != ".":
            break
        position += 1
    return tuple(parts)
