"""What a simulated campaign knows about itself: true values, true changes, true edits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path

Value = float | int | str | bool
"""A setting: number, text or truth."""


@dataclass(frozen=True)
class Truth:
    """A number that a fit of one scan should find.

    Attributes
    ----------
    what : str
        In words, for a table.
    scan : str
        ``label#round``, or ``found`` and the time of the first shot for a scan without a label.
    sequence : str
        The sequence of the scan.
    model, background : str, str or None
        The line shape the scan was generated with; a background of None is the model's default.
    observable : str
        What was read.
    along : str or None
        For a scan of several axes the one to fit along; None when there is only one.
    parameter : str
        Name of the estimate.
    value : float
        The true value, in `unit`, the unit of the estimate with the card's units on the axes.
    unit : str
        For instance ``A`` or ``1/ms``.
    swept : tuple of str
        The axes of the scan.
    where : mapping of str to float
        For a scan of several axes the slice that is meant; empty otherwise.
    first, last : datetime
        Times of the first and the last shot of the scan, with offset.
    """

    what: str
    scan: str
    sequence: str
    model: str
    observable: str
    along: str | None
    parameter: str
    value: float
    unit: str
    background: str | None
    swept: tuple[str, ...]
    first: datetime
    last: datetime
    where: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class TrueChange:
    """A change of the machine.

    Attributes
    ----------
    at : datetime
        The first shot affected.
    kind : str
        ``step``.
    observable : str
        What changed.
    size : float
        After over before, less one.
    cause : str or None
        The parameter whose edit did it.
    old, new : number, text, truth or None
        Its values.
    """

    at: datetime
    kind: str
    observable: str
    size: float
    cause: str | None
    old: Value | None
    new: Value | None


@dataclass(frozen=True)
class TrueEdit:
    """A parameter changed by a person, in every sequence, for good; `at` is the first shot after it."""

    at: datetime
    parameter: str
    old: Value
    new: Value


@dataclass(frozen=True)
class Campaign:
    """A campaign on disk: the files, one a night, the machine card, and the truth."""

    files: tuple[Path, ...]
    card: Path
    truths: tuple[Truth, ...]
    changes: tuple[TrueChange, ...]
    edits: tuple[TrueEdit, ...]
    shots: int
