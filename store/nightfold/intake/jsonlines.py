"""Reading JSON lines: one shot record a line, streamed."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from pydantic_core import from_json

from nightfold.errors import RecordError
from nightfold.intake.lines import Line, read_lines, too_long, undecodable
from nightfold.ledger.outcome import Incoming

_WANTED = "one JSON object on each line"
_PLACE = re.compile(r" at line 1 column (\d+)$")


def read_json_lines(path: str | Path, *, start: int = 0, first_line: int = 1) -> Iterator[Incoming]:
    """Yield what stands on the lines of a JSON-lines file, blank lines left out.

    Memory does not grow with the file; a byte order mark and Windows line ends are accepted, a line that
    cannot be read is handed on with its problem and the next one is read.

    Parameters
    ----------
    path : str or Path
        The file.
    start : int
        Offset of the first byte of a line, to go on where an earlier reading stopped.
    first_line : int
        The number of the line at `start`.

    Raises
    ------
    RecordError
        If the file is UTF-16.

    Notes
    -----
    `NaN`, `Infinity` and `-Infinity` are read as numbers, integers of up to 4300 digits exactly. An object
    that says a key twice is refused, since one of the values would be lost.
    """
    source = str(path)
    for line in read_lines(Path(path), start=start, first_line=first_line):
        if line.data.isspace() or not line.data:
            continue
        record, problem = decode_line(line)
        yield Incoming(record, source, line.number, line.byte, problem)


def decode_line(line: Line) -> tuple[dict[str, Any] | None, RecordError | None]:
    """Return the object on a line, or the reason why there is none."""
    if line.too_long:
        return None, too_long(line)
    try:
        value = from_json(line.data.rstrip(), allow_inf_nan=True)
    except ValueError as error:
        return None, _explain(line, str(error))
    if type(value) is not dict:
        return None, RecordError("", f"{_KINDS.get(type(value), 'a number')}, {_excerpt(line.data)}", _WANTED)
    # A cheap sign first: each key of a line that writes no space before its colons shows once as `":`.
    if line.data.count(b'":') != _count_keys(value) and (twice := _first_repeated_key(line.data)):
        return None, RecordError(twice, "the key twice in one object", "each key once")
    return value, None


_KINDS = {list: "an array", str: "a text", bool: "a truth value", type(None): "null"}


def _explain(line: Line, message: str) -> RecordError:
    """Return the problem behind a decoder's message, in words that say what to do."""
    if not line.ended and message.startswith("EOF while parsing"):
        tail = line.data[-30:].decode("utf-8", errors="replace")
        return RecordError(
            "",
            f"a line that ends in {tail!r}: the last line is cut off",
            "a whole JSON object and a line end",
        )
    if problem := undecodable(line.data):
        return problem
    place = _PLACE.search(message)
    if not place:
        return RecordError("", message, _WANTED)
    column = int(place[1])
    return RecordError(
        "",
        f"no JSON ({_PLACE.sub('', message)} at column {column}) near {_excerpt(line.data, column)}",
        _WANTED,
    )


def _excerpt(data: bytes, column: int = 1) -> str:
    """Return the 40 bytes around a column (from 1) as quoted text."""
    begin = max(0, column - 21)
    return repr(data[begin : begin + 40].decode("utf-8", errors="replace").strip())


def _count_keys(record: dict[str, Any]) -> int:
    """Return the number of keys in a record, its parts, and the lists within them."""
    count = len(record)
    for part in record.values():
        if type(part) is dict:
            count += len(part)
            for inner in part.values():
                if type(inner) is dict:
                    count += len(inner)
                elif type(inner) is list:
                    count += _count_in_list(inner)
        elif type(part) is list:
            count += _count_in_list(part)
    return count


def _count_in_list(items: list[Any]) -> int:
    """Return the number of keys in the objects of a list."""
    return sum(_count_keys(item) for item in items if type(item) is dict)


def _first_repeated_key(data: bytes) -> str | None:
    """Return a key that some object says twice, or None; exact and slower than `_count_keys`."""
    repeated: list[str] = []

    def check(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        found = dict(pairs)
        if len(found) != len(pairs):
            names = [name for name, _ in pairs]
            repeated.extend(name for name in found if names.count(name) > 1)
        return found

    json.loads(data, object_pairs_hook=check)
    return repeated[0] if repeated else None
