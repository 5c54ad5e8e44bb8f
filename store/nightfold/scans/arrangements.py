"""What was arranged by hand: which scans were joined and split, when, by whom and why."""

from __future__ import annotations

from collections.abc import Collection, Iterable
from dataclasses import dataclass, fields
from datetime import datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import ColumnElement, Connection, Row, func, select

from nightfold import tables
from nightfold.ledger.selecting import scan_key
from nightfold.timestamps import from_us

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Arrangement:
    """One joining or splitting of scans.

    Attributes
    ----------
    number : int
    kind : {'join', 'split'}
    at : datetime
        When it was done (UTC).
    by, reason : str or None
    undone : datetime or None
    undone_by : str or None
    machine, sequence : str
    before, after : tuple of str
        The scans that had the shots, and those they went to, also where that was undone since: as ``label#round``, or
        the id of one that has no label or is gone.
    shots : int
    """

    number: int
    kind: str
    at: datetime
    by: str | None
    reason: str | None
    undone: datetime | None
    undone_by: str | None
    machine: str
    sequence: str
    before: tuple[str, ...]
    after: tuple[str, ...]
    shots: int


def arrangements_of(connection: Connection, scan_id: int) -> tuple[Arrangement, ...]:
    """Return the arrangements that made a scan what it is, oldest first."""
    row, whole = tables.arranged, tables.arrangement
    own = select(row.c.arrangement_id).where(row.c.to_scan == scan_id)
    return tuple(read_arrangements(connection, whole.c.id.in_(own), whole.c.undone_us.is_(None)))


def arranged_numbers(connection: Connection) -> dict[int, tuple[int, ...]]:
    """Return the numbers of the arrangements that made each scan what it is."""
    row, whole = tables.arranged, tables.arrangement
    query = select(row.c.to_scan, row.c.arrangement_id).join(whole, whole.c.id == row.c.arrangement_id)
    found: dict[int, tuple[int, ...]] = {}
    standing = query.where(whole.c.undone_us.is_(None)).distinct().order_by(row.c.arrangement_id)
    for step in connection.execute(standing):
        found[step.to_scan] = (*found.get(step.to_scan, ()), step.arrangement_id)
    return found


def where_gone(connection: Connection, scan_id: int) -> Arrangement | None:
    """Return the arrangement that took the last shots of a scan, if one did."""
    row, whole = tables.arranged, tables.arrangement
    own = select(func.max(row.c.arrangement_id)).join(whole, whole.c.id == row.c.arrangement_id)
    newest = own.where(row.c.from_scan == scan_id, row.c.to_scan != scan_id, whole.c.undone_us.is_(None))
    return next(iter(read_arrangements(connection, whole.c.id == newest.scalar_subquery())), None)


def arrangement_table(arrangements: Iterable[Arrangement]) -> pd.DataFrame:
    """Return arrangements as a frame with a row each; columns as the fields of `Arrangement`, times in UTC."""
    import pandas as pd

    rows = [[getattr(item, field.name) for field in fields(Arrangement)] for item in arrangements]
    frame = pd.DataFrame(rows, columns=[field.name for field in fields(Arrangement)], dtype=object)
    for name in ("at", "undone"):
        frame[name] = pd.to_datetime(frame[name], utc=True)
    return frame.astype({"number": "int64", "shots": "int64"})


def read_arrangements(connection: Connection, *which: ColumnElement[bool]) -> list[Arrangement]:
    """Return the arrangements that meet all conditions, oldest first."""
    whole, row, shot = tables.arrangement, tables.arranged, tables.shot
    sequence, machine = tables.sequence, tables.machine
    found = list(connection.execute(select(whole).where(*which).order_by(whole.c.id)))
    steps = (
        select(
            row.c.arrangement_id, row.c.from_scan, row.c.to_scan,
            sequence.c.name.label("sequence"), machine.c.name.label("machine"),
            func.count().label("shots"), func.min(shot.c.started_us).label("first_us"),
        )
        .join(shot, shot.c.id == row.c.shot_id)
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .join(machine, machine.c.id == sequence.c.machine_id)
        .where(row.c.arrangement_id.in_([item.id for item in found]))
        .group_by(row.c.arrangement_id, row.c.from_scan, row.c.to_scan, sequence.c.name, machine.c.name)
        .order_by(func.min(shot.c.started_us))
    )  # fmt: skip
    moved: dict[int, list[Row[Any]]] = {}
    for step in connection.execute(steps):
        moved.setdefault(step.arrangement_id, []).append(step)
    ids = {scan_id for own in moved.values() for step in own for scan_id in (step.from_scan, step.to_scan)}
    keys = _keys(connection, ids)
    return [_make(item, moved[item.id], keys) for item in found]


def _make(item: Row[Any], steps: list[Row[Any]], keys: dict[int, str]) -> Arrangement:
    return Arrangement(
        number=item.id,
        kind=item.kind,
        at=from_us(item.at_us),
        by=item.by,
        reason=item.reason,
        undone=None if item.undone_us is None else from_us(item.undone_us),
        undone_by=item.undone_by,
        machine=steps[0].machine,
        sequence=steps[0].sequence,
        before=tuple(keys[scan_id] for scan_id in dict.fromkeys(step.from_scan for step in steps)),
        after=tuple(keys[scan_id] for scan_id in dict.fromkeys(step.to_scan for step in steps)),
        shots=sum(step.shots for step in steps),
    )


def _keys(connection: Connection, ids: Collection[int]) -> dict[int, str]:
    """Return how scans are named, by id; one that is gone by its id, which no other scan gets."""
    scan = tables.scan
    rows = connection.execute(select(scan).where(scan.c.id.in_(ids)))
    there = {row.id: scan_key(row.id, row.label, row.round) or "" for row in rows}
    return {scan_id: str(scan_id) for scan_id in ids} | there
