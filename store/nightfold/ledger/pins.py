"""Shots whose scan a person chose: folding leaves them where they are, until that is undone.

An *arrangement* (a join or a split of scans) names for each shot the scan it was in and the one it went to. The scans
named by arrangements that stand are *kept*: they hold their id, label and round even without a shot, so that undoing
finds them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from sqlalchemy import ColumnElement, Connection, Select, exists, select, union

from nightfold import tables


@dataclass(frozen=True, slots=True)
class Pin:
    """Where an arranged shot is.

    Attributes
    ----------
    origin : int
        The scan it was in before anybody arranged it.
    scan : int
        The scan it is in.
    """

    origin: int
    scan: int


def is_pinned(shot_id: ColumnElement[int]) -> ColumnElement[bool]:
    """Return the condition that a person chose the scan of a shot."""
    row, whole = tables.arranged, tables.arrangement
    return exists().where(
        row.c.shot_id == shot_id, whole.c.id == row.c.arrangement_id, whole.c.undone_us.is_(None)
    )


def read_pins(connection: Connection, sequence_id: int) -> dict[int, Pin]:
    """Return the pins of a sequence's shots, by shot id."""
    row, shot = tables.arranged, tables.shot
    query = _standing(row.c.shot_id, row.c.from_scan, row.c.to_scan).join(shot, shot.c.id == row.c.shot_id)
    pins: dict[int, Pin] = {}
    for found in connection.execute(
        query.where(shot.c.sequence_id == sequence_id).order_by(row.c.arrangement_id)
    ):
        first = pins.get(found.shot_id)
        pins[found.shot_id] = Pin(first.origin if first else found.from_scan, found.to_scan)
    return pins


def kept_scans(connection: Connection) -> set[int]:
    """Return the scans that arrangements refer to which were not undone."""
    row = tables.arranged
    return set(connection.execute(union(_standing(row.c.from_scan), _standing(row.c.to_scan))).scalars())


def pinned_times(connection: Connection, sequence_id: int, first_us: int, last_us: int) -> list[int]:
    """Return when shots without a label started whose scan a person chose, between two times."""
    row, shot, scan = tables.arranged, tables.shot, tables.scan
    query = (
        _standing(shot.c.started_us)
        .join(shot, shot.c.id == row.c.shot_id)
        .join(scan, scan.c.id == row.c.from_scan)
        .where(shot.c.sequence_id == sequence_id, shot.c.started_us.between(first_us, last_us))
        .where(scan.c.label.is_(None))
    )
    return sorted(set(connection.execute(query).scalars()))


def label_of(connection: Connection, shot_id: int, scan_id: int | None) -> str | None:
    """Return the label that a shot's record carries: that of its scan, before anybody arranged it."""
    row, scan = tables.arranged, tables.scan
    first = _standing(row.c.from_scan).where(row.c.shot_id == shot_id).order_by(row.c.arrangement_id).limit(1)
    origin = connection.execute(first).scalar()
    own = scan.c.id == (scan_id if origin is None else origin)
    return connection.execute(select(scan.c.label).where(own)).scalar()


def _standing(*columns: ColumnElement[int]) -> Select[Any]:
    """Return a query of rows of arrangements that were not undone."""
    row, whole = tables.arranged, tables.arrangement
    standing = row.join(whole, whole.c.id == row.c.arrangement_id)
    query: Select[Any] = select().add_columns(*columns).select_from(standing)
    return query.where(whole.c.undone_us.is_(None))
