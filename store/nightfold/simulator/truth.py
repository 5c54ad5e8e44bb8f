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
    relative_to : str or None
        ``reference`` where the observable is meant relative to the reference shots around.
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
    relative_to: str | None = None


@dataclass(frozen=True)
class Mishap:
    """Something that went otherwise than planned, and what is true once it has been put right.

    Attributes
    ----------
    kind : str
        ``resumed``, ``clouds``, ``reanalysed``, ``misrecorded``, ``mislabelled``, ``drifting``, ``misnamed`` or
        ``adaptive``.
    scans : tuple of str
        Keys of the scans as the records have them.
    sequence : str
    shots : int
        Of the scan once it has been put right, references not counted.
    first, last : datetime
        Times of its first and last shot, with offset.
    truths : tuple of Truth
        What fits should find once it has been put right.
    parameter : str or None
        What was recorded wrongly.
    factor : float
        Recorded over true.
    machine : str or None
        The other name under which shots were recorded.
    """

    kind: str
    scans: tuple[str, ...]
    sequence: str
    shots: int
    first: datetime
    last: datetime
    truths: tuple[Truth, ...]
    parameter: str | None = None
    factor: float = 1.0
    machine: str | None = None


@dataclass(frozen=True)
class TrueWarming:
    """A sensor that settles `step` kelvin higher, for good, within hours of `at`, because of an edit of `cause`."""

    at: datetime
    sensor: str
    step: float
    cause: str


@dataclass(frozen=True)
class TrueVersion:
    """A step put into a sequence for good; `at` is the first shot with it."""

    at: datetime
    sequence: str
    step: str


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
    """A campaign on disk, and the truth.

    Attributes
    ----------
    files : tuple of Path
        The shots, one file a night.
    card : Path
        The machine card.
    truths, changes, edits, mishaps, versions, warmings : tuple
        What is true. `truths` need nothing to be put right; those that do stand with their mishap.
    shots : int
    reanalyses : tuple of Path
        Files of later analyses, to be taken after the shots.
    sensors : Path
        What the sensors of the room read, once a minute.
    """

    files: tuple[Path, ...]
    card: Path
    truths: tuple[Truth, ...]
    changes: tuple[TrueChange, ...]
    edits: tuple[TrueEdit, ...]
    mishaps: tuple[Mishap, ...]
    versions: tuple[TrueVersion, ...]
    warmings: tuple[TrueWarming, ...]
    shots: int
    reanalyses: tuple[Path, ...]
    sensors: Path
