"""What became of the records handed over."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from nightfold.errors import RecordError


@dataclass(frozen=True, slots=True)
class Incoming:
    """One record as a reader hands it over.

    Attributes
    ----------
    record : mapping or None
        The decoded object; None when the line cannot be read.
    source : str
        File name as given, or where else the record comes from.
    line : int
        1-based line number, or position in the iterable.
    byte : int
        Offset of the line's first byte in the file.
    problem : RecordError, optional
        Why `record` is None.
    partial : bool
        Whether the record holds only some settings of a shot, as a row of an exported table does.
    """

    record: Mapping[str, Any] | None
    source: str
    line: int
    byte: int
    problem: RecordError | None = None
    partial: bool = False


@dataclass(frozen=True, slots=True)
class Refused:
    """A record that was not taken: where it stood, and why."""

    source: str
    line: int
    reason: str


@dataclass(slots=True)
class Intake:
    """How many records were new, known already, amended a shot, or were refused.

    Attributes
    ----------
    new, known, amended : int
    refused : list of Refused
    """

    new: int = 0
    known: int = 0
    amended: int = 0
    refused: list[Refused] = field(default_factory=list)

    def __add__(self, other: Intake) -> Intake:
        """Return both outcomes together."""
        return Intake(
            self.new + other.new,
            self.known + other.known,
            self.amended + other.amended,
            self.refused + other.refused,
        )
