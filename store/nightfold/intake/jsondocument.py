"""Reading a JSON file that is no JSON lines: an array of records, or records printed over several lines."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from pydantic_core import from_json

from nightfold.errors import RecordError
from nightfold.intake.lines import LONGEST_LINE, read_lines, undecodable
from nightfold.ledger.outcome import Incoming

_GAP = re.compile(r"[\s,]*")


def is_document(path: str | Path) -> bool:
    """Return whether a JSON file holds an array, or an object that goes on after its first line."""
    for line in read_lines(Path(path)):
        if line.data.isspace():
            continue
        if line.too_long or line.data.lstrip().startswith(b"["):
            return True
        try:
            from_json(line.data, allow_inf_nan=True)
        except ValueError as error:
            return line.ended and str(error).startswith("EOF while parsing")
        return False
    return False


def read_json_document(path: str | Path) -> Iterator[Incoming]:
    """Yield the records of a JSON file that holds one array of them, or several written one after another.

    The whole file is held in memory, so it may have at most 16 MiB. At a fault the reading stops, since what
    comes after it cannot be told apart.

    Raises
    ------
    RecordError
        If the file is too large, is not UTF-8, or is UTF-16.
    """
    text, skipped = _read_text(Path(path))
    source = str(path)
    place, line, byte = 0, 1, skipped
    position = _begin(text)
    while position < len(text) and not (text[position] == "]" and not text[position + 1 :].strip()):
        line += text.count("\n", place, position)
        byte += len(text[place:position].encode("utf-8"))
        place = position
        try:
            value, position = _DECODER.raw_decode(text, position)
        except (ValueError, RecursionError) as error:
            yield Incoming(None, source, line, byte, _explain(text, position, error))
            return
        if isinstance(value, dict):
            yield Incoming(value, source, line, byte)
        else:
            found = repr(text[place : place + 40])
            yield Incoming(None, source, line, byte, RecordError("", found, "a JSON object"))
        position = _skip_gap(text, position)


def _read_text(path: Path) -> tuple[str, int]:
    """Return the text of a file and the length of its byte order mark."""
    size = path.stat().st_size
    if size > LONGEST_LINE:
        wanted = f"at most {LONGEST_LINE // 1024**2} MiB; larger files as JSON lines: one object a line"
        raise RecordError(str(path), f"a JSON array or a printed object of {size} bytes", wanted)
    parts = list(read_lines(path))
    for part in parts:
        if problem := undecodable(part.data):
            raise RecordError(f"{path}:{part.number}", problem.found, problem.wanted)
    text = b"".join(part.data for part in parts).decode("utf-8")
    return text, parts[0].byte if parts else 0


def _begin(text: str) -> int:
    """Return where the first record stands, past the bracket that opens an array."""
    position = _skip_gap(text, 0)
    return _skip_gap(text, position + 1) if text[position : position + 1] == "[" else position


def _skip_gap(text: str, position: int) -> int:
    """Return the next place that is neither a space nor a comma."""
    gap = _GAP.match(text, position)
    return gap.end() if gap else position


def _unrepeated(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    """Return the pairs as a dict; a key said twice is an error."""
    found = dict(pairs)
    if len(found) != len(pairs):
        names = [name for name, _ in pairs]
        twice = next(name for name in names if names.count(name) > 1)
        raise RecordError(twice, "the key twice in one object", "each key once")
    return found


_DECODER = json.JSONDecoder(object_pairs_hook=_unrepeated)


def _explain(text: str, position: int, error: Exception) -> RecordError:
    """Return what is wrong with the record that starts at a position."""
    if isinstance(error, RecordError):
        return error
    message = str(error)
    if isinstance(error, json.JSONDecodeError) and not text[error.pos :].strip():
        message = f"the file ends within a record that starts {text[position : position + 30]!r}"
    return RecordError("", message, "whole JSON objects, in an array or one after another")
