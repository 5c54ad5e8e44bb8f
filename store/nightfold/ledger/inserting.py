"""Writing checked shots: their value sets, what moved, their readings and all that came with them."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import chain
from typing import Any

from sqlalchemy import Connection, select

from nightfold import tables
from nightfold.ledger.amending import find_derivation
from nightfold.ledger.checking import CheckedShot
from nightfold.ledger.notes import shot_subject
from nightfold.ledger.rows import chunks, insert_many, next_id
from nightfold.timestamps import now_us


def insert_sets(connection: Connection, shots: Sequence[CheckedShot], known: dict[bytes, int]) -> None:
    """Find or make the value sets of shots; `known` (digest -> id) grows accordingly."""
    missing = {shot.set_digest: shot for shot in shots if shot.set_digest not in known}
    table = tables.value_set
    for part in chunks(sorted(missing)):
        for row in connection.execute(select(table.c.id, table.c.digest).where(table.c.digest.in_(part))):
            known[bytes(row.digest)] = row.id
    new = [digest for digest in sorted(missing) if digest not in known]
    if not new:
        return
    rows, contents = [], []
    for set_id, digest in enumerate(new, next_id(connection, table)):
        shot = missing[digest]
        resting = shot.resting or {}
        ids = shot.machine.parameters
        rows.append((set_id, digest, len(resting)))
        contents += [
            (set_id, ids[name].id, entry.value.num, entry.value.exact) for name, entry in resting.items()
        ]
        known[digest] = set_id
    insert_many(connection, table, rows)
    insert_many(connection, tables.set_value, contents)


def insert_shots(connection: Connection, shots: Sequence[CheckedShot], sets: dict[bytes, int]) -> None:
    """Write shots that have their ids, with everything that hangs on them."""
    insert_many(connection, tables.shot, [_shot_row(shot, sets) for shot in shots])
    insert_many(connection, tables.shot_value, list(chain.from_iterable(map(_moving_rows, shots))))
    insert_many(connection, tables.swept_derived, list(chain.from_iterable(map(_swept_rows, shots))))
    readings = [_reading_rows(shot, find_derivation(connection, shot.derivation)) for shot in shots]
    insert_many(connection, tables.reading, list(chain.from_iterable(readings)))
    frames = [(shot.id, item.camera, item.role, item.path, None) for shot in shots for item in shot.frames]
    insert_many(connection, tables.frame, frames)
    at_us = now_us()
    notes = [
        {"subject": shot_subject(shot.id), "text": shot.note, "at_us": shot.started_us}
        for shot in shots
        if shot.note
    ]
    failed = [
        {"shot_id": shot.id, "reason": shot.failed, "rule": "failed", "at_us": at_us}
        for shot in shots
        if shot.failed is not None
    ]
    for table, rows in ((tables.note, notes), (tables.set_aside, failed)):
        if rows:
            connection.execute(table.insert(), rows)


def _shot_row(shot: CheckedShot, sets: dict[bytes, int]) -> tuple[Any, ...]:
    return (
        shot.id, shot.uid, shot.started_us, shot.sequence_id, shot.version_id, shot.scan_id, shot.reference,
        shot.wish.planned_shots, shot.wish.last,
        sets[shot.set_digest], shot.values_digest, shot.content_digest, shot.source_id, shot.line,
    )  # fmt: skip


def _moving_rows(shot: CheckedShot) -> list[tuple[Any, ...]]:
    ids, swept = shot.machine.parameters, shot.wish.swept
    return [
        (shot.id, ids[name].id, entry.value.num, entry.value.exact, name in swept)
        for name, entry in shot.moving.items()
    ]


def _swept_rows(shot: CheckedShot) -> list[tuple[Any, ...]]:
    """Return what the record declared swept and the card derives: there is no moving row to say so."""
    machine = shot.machine
    derived = machine.card.derived if machine.card is not None else {}
    return [(shot.id, machine.parameters[name].id) for name in shot.wish.swept if name in derived]


def _reading_rows(shot: CheckedShot, derivation_id: int | None) -> list[tuple[Any, ...]]:
    ids, shot_id = shot.machine.observables, shot.id
    return [(shot_id, ids[name].id, *read, derivation_id) for name, read in shot.readings.items()]
