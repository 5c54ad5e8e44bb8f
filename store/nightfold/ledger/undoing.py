"""Undoing a correction: by further corrections, back to what each shot had."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from sqlalchemy import Connection, Row, func, select

from nightfold import tables
from nightfold.errors import NotFound, RequestError
from nightfold.ledger.correcting import Change, Corrected, held_values, write_changes
from nightfold.ledger.rows import chunks
from nightfold.records import shorten
from nightfold.settings import Value

_NEWEST = 3


def correction_numbers(connection: Connection, moments: Sequence[int]) -> dict[int, int]:
    """Return the numbers of the corrections that were made at these times: those of one call have one time."""
    table = tables.correction
    numbers: dict[int, int] = {}
    for part in chunks(sorted(set(moments))):
        query = select(table.c.at_us, func.min(table.c.id)).where(table.c.at_us.in_(part))
        for at_us, number in connection.execute(query.group_by(table.c.at_us)):
            numbers[at_us] = number
    return numbers


def undo_correction(connection: Connection, number: int, by: str | None) -> tuple[Corrected, list[Row[Any]]]:
    """Correct each shot of a correction back; return what was done, and the shots as they were before.

    Raises
    ------
    NotFound
        If there is no correction of that number.
    RequestError
        If it is undone already, or a setting was corrected again since.
    """
    rows = _rows_of(connection, number)
    shots = _shots(connection, sorted({row.shot_id for row in rows}))
    held = held_values(connection, list(shots.values()), {row.parameter_id for row in rows})
    changes: dict[int, list[Change]] = {}
    for row in rows:
        before = Value(row.kind, row.old_num, row.old_exact)
        after = Value(row.kind, row.new_num, row.new_exact)
        now, moving = held[row.shot_id, row.parameter_id]
        if now.token == before.token:
            continue
        if now.token != after.token:
            raise RequestError(_again_since(connection, number, shots[row.shot_id], row))
        change = Change(row.parameter_id, row.name, now, before, moving, row.unit or "")
        changes.setdefault(row.shot_id, []).append(change)
    if not changes:
        raise RequestError(f"correction {number}: each shot has again what it had before; nothing to undo")
    changed = [shot for shot in shots.values() if shot.id in changes]
    made = write_changes(connection, changed, changes, f"undoes correction {number}", by)
    return Corrected.of(changed, changes, made), changed


def _rows_of(connection: Connection, number: int) -> Sequence[Row[Any]]:
    """Return the rows of one correction, with what is known of the parameters."""
    table, parameter = tables.correction, tables.parameter
    at_us = connection.execute(select(table.c.at_us).where(table.c.id == number)).scalar()
    if at_us is None or correction_numbers(connection, [at_us])[at_us] != number:
        raise NotFound(f"correction {shorten(number)}: there is none of that number; {_newest(connection)}")
    query = (
        select(table, parameter.c.name, parameter.c.kind, parameter.c.unit)
        .join(parameter, parameter.c.id == table.c.parameter_id)
        .where(table.c.at_us == at_us)
        .order_by(table.c.id)
    )
    return connection.execute(query).all()


def _newest(connection: Connection) -> str:
    table = tables.correction
    first = func.min(table.c.id)
    query = select(first).group_by(table.c.at_us).order_by(first.desc()).limit(_NEWEST)
    found = [str(number) for number in connection.execute(query).scalars()]
    return f"the newest are {', '.join(found)}" if found else "nothing was corrected in this store"


def _shots(connection: Connection, shot_ids: Sequence[int]) -> dict[int, Row[Any]]:
    """Return the rows of shots by id, in time order."""
    shot = tables.shot
    found: list[Row[Any]] = []
    for part in chunks(shot_ids):
        found += connection.execute(select(shot).where(shot.c.id.in_(part)))
    return {row.id: row for row in sorted(found, key=lambda row: (row.started_us, row.id))}


def _again_since(connection: Connection, number: int, shot: Row[Any], row: Row[Any]) -> str:
    """Return why a correction cannot be undone: which one came after it."""
    table = tables.correction
    query = (
        select(table.c.at_us)
        .where(table.c.shot_id == shot.id, table.c.parameter_id == row.parameter_id, table.c.id > row.id)
        .order_by(table.c.id.desc())
        .limit(1)
    )
    at_us = connection.execute(query).scalar_one()
    later = correction_numbers(connection, [at_us])[at_us]
    return (
        f"correction {number}: {row.name} of shot {shot.uid} was corrected again since, by correction {later}; "
        f"undo that one first"
    )
