"""What a reader hands on: one record, or the reason why there is none, and where it stood."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nightfold.errors import RecordError


@dataclass(frozen=True, slots=True)
class Incoming:
    """One record as read from a file, not yet checked.

    Attributes
    ----------
    record : mapping or None
        The decoded record; None when it could not be read.
    source : str
        The file, as it was named.
    line : int
        The line, counted from 1, on which the record starts.
    byte : int
        Offset in the file of the first byte of that line, or of the record within a JSON array.
    problem : RecordError or None
        Why `record` is None.
    """

    record: Mapping[str, Any] | None
    source: str
    line: int
    byte: int
    problem: RecordError | None = None
