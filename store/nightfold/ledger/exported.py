"""A row of an exported table, of a shot in the store: it states only what varied, and may bring further observables."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.amending import stored_settings
from nightfold.ledger.checking import readings_of, sequence_name, started_us_of
from nightfold.ledger.names import MachineNames
from nightfold.records import Amendment, ShotRecord, shorten
from nightfold.settings import ReadValue, Value, setting_value
from nightfold.timestamps import from_us

_STORED = "as stored under this uid; an exported table changes nothing that is there"


def amendment_of(
    connection: Connection, stored: Row[Any], machine: MachineNames, record: ShotRecord
) -> Amendment:
    """Return what a row brings to its shot: a note, and observables that the shot does not have.

    Raises
    ------
    RecordError
        If the row says anything else than the store does.
    """
    started_us = started_us_of(record, machine)
    if started_us != stored.started_us:
        wanted = f"{from_us(stored.started_us).isoformat()}, {_STORED}"
        raise RecordError("started", from_us(started_us).isoformat(), wanted)
    if machine.sequences.get(sequence_name(record)) != stored.sequence_id:
        raise RecordError("sequence", shorten(sequence_name(record)), f"the machine and sequence {_STORED}")
    if record.failed is not None:
        raise RecordError("failed", shorten(record.failed), "none; 'nightfold set-aside' sets a shot aside")
    _check_settings(connection, stored, machine, record)
    there = _stored_readings(connection, stored.id)
    read = readings_of(record.observables, machine, {})
    for name, found in read.items():
        before = there.get(name)
        if before is not None and found.state != "null" and (found.value, found.stderr) != before[:2]:
            raise RecordError(
                f"observables.{name}",
                shorten(found.value),
                f"{shorten(before.value)}, {_STORED}; a record with uid and observables does",
            )
    fresh = {
        name: record.observables[name] for name in read if name not in there and read[name].state != "null"
    }
    return Amendment(uid=stored.uid, observables=fresh, note=record.note)


def _check_settings(
    connection: Connection, stored: Row[Any], machine: MachineNames, record: ShotRecord
) -> None:
    """Refuse a setting that the shot does not have, or has otherwise."""
    kept = stored_settings(connection, stored.id, stored.set_id)
    for name, raw in record.parameters.items():
        field = f"parameters.{name}"
        if (stated := setting_value(raw, field)) is None:
            continue
        value, _ = machine.settle(name, *stated, field)
        if name not in kept:
            raise RecordError(field, shorten(value.plain), f"no such parameter, {_STORED}")
        kind, _, num, exact, _ = kept[name]
        before = Value(kind, num, exact)  # type: ignore[arg-type]
        if before.token != value.token:
            raise RecordError(field, shorten(value.plain), f"{shorten(before.plain)}, {_STORED}")


def _stored_readings(connection: Connection, shot_id: int) -> dict[str, ReadValue]:
    reading, observable = tables.reading, tables.observable
    query = select(observable.c.name, reading.c.value, reading.c.stderr, reading.c.state).join(
        reading, reading.c.observable_id == observable.c.id
    )
    rows = connection.execute(query.where(reading.c.shot_id == shot_id))
    return {row.name: ReadValue(row.value, row.stderr, row.state) for row in rows}
