"""A record of a shot that is in the store already: known, an amendment, or refused."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy import Connection, Row, and_, delete, insert, select, update

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.checking import CheckedShot, derivation_of, readings_content
from nightfold.ledger.correcting import digests_before
from nightfold.ledger.doubles import find_counterpart
from nightfold.ledger.names import MachineNames, insert_row
from nightfold.ledger.notes import shot_subject
from nightfold.ledger.pins import label_of
from nightfold.records import Amendment, Derivation, Frame, shorten
from nightfold.settings import ReadValue, Value, digest_content
from nightfold.timestamps import from_us


def amend_shot(connection: Connection, stored: Row[Any], shot: CheckedShot, at_us: int) -> bool:
    """Compare a whole record with the shot stored under its uid; return whether anything was changed.

    What it brings to a shot that is there a second time, it brings to the one that counts as well.

    Raises
    ------
    RecordError
        If settings, time, sequence or scan differ: a shot's settings are never overwritten.
    """
    if bytes(stored.content_digest) == shot.content_digest or _seen(
        connection, stored.id, shot.content_digest
    ):
        return False
    check_identity(connection, stored, shot)
    changed = False
    for row in _addressed(connection, stored, shot.content_digest):
        changed = _bring(connection, row, shot, at_us) or changed
    return changed


def _addressed(connection: Connection, stored: Row[Any], digest: bytes) -> list[Row[Any]]:
    """Return the shots that something new is for: the stored one, and the one that counts if this one is a double."""
    counting = find_counterpart(connection, stored) if stored.double else None
    if counting is None or bytes(counting.content_digest) == digest or _seen(connection, counting.id, digest):
        return [stored]
    return [stored, counting]


def _bring(connection: Connection, stored: Row[Any], shot: CheckedShot, at_us: int) -> bool:
    """Bring what a whole record says to a shot that it is of; return whether anything was changed."""
    read = _that_hold(connection, stored.id, shot.readings, shot.derivation)
    changed = _amend(connection, stored.id, shot.machine, read, shot.derivation, at_us)
    changed = _end_scan(connection, stored, shot) or changed
    if shot.failed is not None and set_failed(connection, stored.id, shot.failed, at_us):
        changed = True
    changed = _add_notes_and_frames(connection, stored.id, shot, at_us) or changed
    _remember(connection, stored.id, shot.content_digest, at_us)
    return changed


def amend_readings(
    connection: Connection,
    stored: Row[Any],
    machine: MachineNames,
    readings: Mapping[str, ReadValue],
    amendment: Amendment,
    at_us: int,
) -> bool:
    """Bring what comes by uid alone to a stored shot, and to the one that counts in its place if it is a double.

    Return whether anything was changed. `readings` are the observables of the amendment in the units stored.
    """
    derivation = derivation_of(amendment.derivation)
    digest = digest_content(("amendment", *readings_content(readings, derivation), *_also_brought(amendment)))
    if _seen(connection, stored.id, digest):
        return False
    changed = False
    for row in _addressed(connection, stored, digest):
        read = _that_hold(connection, row.id, readings, derivation)
        changed = _amend(connection, row.id, machine, read, derivation, at_us) or changed
        changed = _add_notes_and_frames(connection, row.id, amendment, at_us) or changed
        _remember(connection, row.id, digest, at_us)
    return changed


def _also_brought(amendment: Amendment) -> tuple[Any, ...]:
    """Return note and frames as plain values; nothing where there are none, as before they could be brought."""
    if not amendment.note and not amendment.frames:
        return ()
    return amendment.note, [frame.model_dump() for frame in amendment.frames]


def _that_hold(
    connection: Connection, shot_id: int, readings: Mapping[str, ReadValue], derivation: Derivation | None
) -> Mapping[str, ReadValue]:
    """Return the readings without nulls that only say "not read": those of no analysis, where there is a reading."""
    if derivation is not None or all(read.state != "null" for read in readings.values()):
        return readings
    there = _read_names(connection, shot_id)
    return {name: read for name, read in readings.items() if read.state != "null" or name not in there}


def _read_names(connection: Connection, shot_id: int) -> set[str]:
    reading, observable = tables.reading, tables.observable
    query = select(observable.c.name).join(reading, reading.c.observable_id == observable.c.id)
    return set(connection.execute(query.where(reading.c.shot_id == shot_id)).scalars())


def _end_scan(connection: Connection, stored: Row[Any], shot: CheckedShot) -> bool:
    """Note that a shot was the last of its scan after all; False if that is known or not said."""
    if not shot.wish.last or stored.last:
        return False
    if label_of(connection, stored.id, stored.scan_id) != _wished_label(shot):
        return False  # the one that counts is of another scan than the record of the double says
    table = tables.shot
    connection.execute(update(table).where(table.c.id == stored.id).values(last=True))
    scan = tables.scan
    connection.execute(update(scan).where(scan.c.id == stored.scan_id).values(closed_us=stored.started_us))
    return True


def _seen(connection: Connection, shot_id: int, digest: bytes) -> bool:
    table = tables.amendment
    same = and_(table.c.shot_id == shot_id, table.c.digest == digest)
    return connection.execute(select(table.c.at_us).where(same)).first() is not None


def _remember(connection: Connection, shot_id: int, digest: bytes, at_us: int) -> None:
    connection.execute(insert(tables.amendment).values(shot_id=shot_id, digest=digest, at_us=at_us))


def check_identity(connection: Connection, stored: Row[Any], shot: CheckedShot) -> None:
    """Refuse a record whose settings, time, sequence or scan are not those of the shot stored under its uid.

    The settings may also be those that the shot had before they were corrected.

    Raises
    ------
    RecordError
    """
    taken = "as stored under this uid; a shot's settings are never overwritten"
    if stored.sequence_id != shot.machine.sequences.get(shot.sequence):
        raise RecordError(
            "sequence", shorten(f"{shot.machine.name}: {shot.sequence}"), f"machine and sequence {taken}"
        )
    if stored.started_us != shot.started_us:
        raise RecordError(
            "started",
            from_us(shot.started_us).isoformat(),
            f"{from_us(stored.started_us).isoformat()}, {taken}",
        )
    if bytes(stored.values_digest) != shot.values_digest and shot.values_digest not in digests_before(
        connection, stored.id
    ):
        raise _differing_setting(connection, stored, shot, f"{taken}; 'nightfold amend' corrects them")
    if bool(stored.reference) != shot.reference:
        raise RecordError("reference", str(shot.reference), taken)
    label = label_of(connection, stored.id, stored.scan_id)
    wished = _wished_label(shot)
    if label != wished:
        raise RecordError("scan", _label(wished), f"{_label(label)}, {taken}")
    check_frames(connection, stored.id, shot.frames)


def check_frames(connection: Connection, shot_id: int, frames: Sequence[Frame]) -> None:
    """Refuse a frame whose camera and role the shot has with another path.

    Raises
    ------
    RecordError
    """
    if not frames:
        return
    table = tables.frame
    rows = connection.execute(select(table).where(table.c.shot_id == shot_id))
    stored = {(row.camera, row.role): row.path for row in rows}
    for place, frame in enumerate(frames):
        path = stored.get((frame.camera, frame.role), frame.path)
        if path != frame.path:
            wanted = (
                f"{shorten(path)}, as stored for this camera and role; another picture needs another role"
            )
            raise RecordError(f"frames.{place}.path", shorten(frame.path), wanted)


def _wished_label(shot: CheckedShot) -> str | None:
    """Return the label that a record says its scan has."""
    return None if shot.reference else shot.wish.label


def _label(label: str | None) -> str:
    return "no label" if label is None else shorten(label)


def _differing_setting(
    connection: Connection, stored: Row[Any], shot: CheckedShot, taken: str
) -> RecordError:
    stated = {name: entry.value for name, entry in ((shot.resting or {}) | shot.moving).items()}
    if shot.resting is None:
        stated |= _set_content(connection, shot.set_digest)
    kept = {
        name: Value(kind, num, exact)  # type: ignore[arg-type]
        for name, (kind, _, num, exact, _) in stored_settings(connection, stored.id, stored.set_id).items()
    }
    for name in sorted({*stated, *kept}):
        field = f"parameters.{name}"
        if name not in kept:
            return RecordError(field, shorten(stated[name].plain), f"no such parameter, {taken}")
        if name not in stated:
            return RecordError(field, "nothing", f"{shorten(kept[name].plain)}, {taken}")
        if kept[name].token != stated[name].token:
            return RecordError(field, shorten(stated[name].plain), f"{shorten(kept[name].plain)}, {taken}")
    return RecordError("parameters", "other settings", taken)


def _set_content(connection: Connection, digest: bytes) -> dict[str, Value]:
    parameter, rest, whole = tables.parameter, tables.set_value, tables.value_set
    query = (
        select(parameter.c.name, parameter.c.kind, rest.c.num, rest.c.exact)
        .join(rest, rest.c.parameter_id == parameter.c.id)
        .join(whole, whole.c.id == rest.c.set_id)
        .where(whole.c.digest == digest)
    )
    return {row.name: Value(row.kind, row.num, row.exact) for row in connection.execute(query)}


def stored_settings(
    connection: Connection, shot_id: int, set_id: int
) -> dict[str, tuple[str, str | None, float | None, str | None, bool]]:
    """Return kind, unit, num, exact and swept of every setting of a stored shot, by name."""
    parameter, rest, move = tables.parameter, tables.set_value, tables.shot_value
    columns = parameter.c.name, parameter.c.kind, parameter.c.unit
    resting = select(*columns, rest.c.num, rest.c.exact).join(rest, rest.c.parameter_id == parameter.c.id)
    moving = select(*columns, move.c.num, move.c.exact, move.c.swept).join(
        move, move.c.parameter_id == parameter.c.id
    )
    found = {
        row.name: (row.kind, row.unit, row.num, row.exact, False)
        for row in connection.execute(resting.where(rest.c.set_id == set_id))
    }
    for row in connection.execute(moving.where(move.c.shot_id == shot_id)):
        found[row.name] = (row.kind, row.unit, row.num, row.exact, bool(row.swept))
    return found


def _amend(
    connection: Connection,
    shot_id: int,
    machine: MachineNames,
    readings: Mapping[str, ReadValue],
    derivation: Derivation | None,
    at_us: int,
) -> bool:
    table = tables.reading
    derivation_id = find_derivation(connection, derivation)
    current = {
        row.observable_id: row for row in connection.execute(select(table).where(table.c.shot_id == shot_id))
    }
    changed = False
    for name, read in readings.items():
        observable_id = machine.observables[name].id
        old = current.get(observable_id) if observable_id is not None else None
        new = read.value, read.stderr, read.state, derivation_id
        if old is not None:
            if (old.value, old.stderr, old.state, old.derivation_id) == new:
                continue
            if old.state == "null" == read.state:
                continue
            past = {**old._mapping, "until_us": at_us}
            connection.execute(insert(tables.past_reading).values(**past))
            same = and_(table.c.shot_id == shot_id, table.c.observable_id == observable_id)
            connection.execute(delete(table).where(same))
        columns = dict(zip(("value", "stderr", "state", "derivation_id"), new, strict=True))
        connection.execute(insert(table).values(shot_id=shot_id, observable_id=observable_id, **columns))
        changed = True
    return changed


def find_derivation(connection: Connection, derivation: Derivation | None) -> int | None:
    """Return the id of a derivation; an unknown one is entered."""
    if derivation is None:
        return None
    table = tables.derivation
    settings = json.dumps(derivation.settings, sort_keys=True, ensure_ascii=False)
    row = {"name": derivation.name, "version": derivation.version, "settings": settings}
    same = and_(*(table.c[column] == value for column, value in row.items()))
    found = connection.execute(select(table.c.id).where(same)).scalar()
    return found if found is not None else insert_row(connection, table, row)


def set_failed(connection: Connection, shot_id: int, reason: str, at_us: int) -> bool:
    """Set a shot aside because its record says that it failed; False if that stands already."""
    table = tables.set_aside
    same = and_(table.c.shot_id == shot_id, table.c.rule == "failed", table.c.reason == reason)
    if connection.execute(select(table.c.id).where(same)).first():
        return False
    connection.execute(
        insert(table).values(shot_id=shot_id, reason=reason, by=None, rule="failed", at_us=at_us)
    )
    return True


def _add_notes_and_frames(
    connection: Connection, shot_id: int, shot: CheckedShot | Amendment, at_us: int
) -> bool:
    changed = False
    note, frame = tables.note, tables.frame
    subject = shot_subject(shot_id)
    if shot.note:
        same = and_(note.c.subject == subject, note.c.text == shot.note)
        if not connection.execute(select(note.c.id).where(same)).first():
            connection.execute(insert(note).values(subject=subject, text=shot.note, by=None, at_us=at_us))
            changed = True
    for item in shot.frames:
        same = and_(frame.c.shot_id == shot_id, frame.c.camera == item.camera, frame.c.role == item.role)
        if not connection.execute(select(frame.c.path).where(same)).first():
            connection.execute(insert(frame).values(shot_id=shot_id, **item.model_dump()))
            changed = True
    return changed
