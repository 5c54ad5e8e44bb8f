"""Everything the store knows of one shot."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, Table, select

from nightfold import tables
from nightfold.ledger.amending import stored_settings
from nightfold.ledger.columns import read_value, reading_columns, setting_columns
from nightfold.ledger.deriving import Makings, declared_names
from nightfold.ledger.notes import shot_subject
from nightfold.ledger.selecting import scan_key
from nightfold.ledger.setting_aside import find_shots
from nightfold.settings import plain_value
from nightfold.timestamps import from_us


@dataclass(frozen=True, slots=True)
class ShotSetting:
    """One setting of a shot: value, unit, whether it was declared swept; if derived, by which expression."""

    value: float | int | str | bool
    unit: str
    swept: bool
    derived: str | None = None


@dataclass(frozen=True, slots=True)
class ShotReading:
    """One observable of a shot: value (NaN where there is none, and `state` says why), stderr or None, unit.

    `derivation` names what made it of the pictures, `derived` is the expression by which the card derives it.
    """

    value: float
    stderr: float | None
    unit: str
    state: str | None
    derivation: str | None
    derived: str | None = None


@dataclass(frozen=True, slots=True)
class ShotView:
    """One shot in full; times are aware, in UTC.

    `corrected` names the parameters that were corrected, `reread` the observables that had another reading before.
    """

    uid: str
    started: datetime
    machine: str
    zone: str
    sequence: str
    scan: str | None
    reference: bool
    parameters: dict[str, ShotSetting]
    observables: dict[str, ShotReading]
    set_aside: str | None
    notes: tuple[str, ...]
    frames: tuple[tuple[str, str, str], ...]
    source: str | None
    line: int | None
    corrected: frozenset[str] = frozenset()
    reread: frozenset[str] = frozenset()


def view_shot(connection: Connection, uid: str) -> ShotView:
    """Return one shot in full.

    Raises
    ------
    NotFound
    """
    shot = next(iter(find_shots(connection, [uid]).values()))
    sequence = connection.execute(
        select(
            tables.sequence.c.name,
            tables.machine.c.name.label("machine"),
            tables.machine.c.zone,
            tables.sequence.c.machine_id,
        )
        .join(tables.machine, tables.machine.c.id == tables.sequence.c.machine_id)
        .where(tables.sequence.c.id == shot.sequence_id)
    ).one()
    scan = connection.execute(select(tables.scan).where(tables.scan.c.id == shot.scan_id)).first()
    aside, note, frame, source = tables.set_aside, tables.note, tables.frame, tables.source
    reason = connection.execute(
        select(aside.c.reason).where(aside.c.shot_id == shot.id, aside.c.lifted_us.is_(None))
    ).scalar()
    noted = (
        select(note.c.text).where(note.c.subject == shot_subject(shot.id)).order_by(note.c.at_us, note.c.id)
    )
    notes = connection.execute(noted).scalars()
    frames = connection.execute(
        select(frame.c.camera, frame.c.role, frame.c.path)
        .where(frame.c.shot_id == shot.id)
        .order_by(frame.c.camera, frame.c.role)
    )
    settings = {
        name: ShotSetting(plain_value(kind, num, exact), unit or "", swept)
        for name, (kind, unit, num, exact, swept) in sorted(
            stored_settings(connection, shot.id, shot.set_id).items()
        )
    }
    derived_settings, derived_readings = _derived(connection, shot, sequence.machine_id, settings)
    path = connection.execute(select(source.c.path).where(source.c.id == shot.source_id)).scalar()
    return ShotView(
        uid=shot.uid,
        started=from_us(shot.started_us),
        machine=sequence.machine,
        zone=sequence.zone,
        sequence=sequence.name,
        scan=scan_key(scan.id, scan.label, scan.round) if scan else None,
        reference=bool(shot.reference),
        parameters=settings | derived_settings,
        observables=_readings(connection, shot.id) | derived_readings,
        set_aside=reason,
        notes=tuple(notes),
        frames=tuple((row.camera, row.role, row.path) for row in frames),
        source=path,
        line=shot.line,
        corrected=_names_in(connection, tables.correction, tables.parameter, shot.id),
        reread=_names_in(connection, tables.past_reading, tables.observable, shot.id),
    )


def _names_in(connection: Connection, table: Table, named: Table, shot_id: int) -> frozenset[str]:
    """Return the names of the parameters, or observables, of which a table tells something of the shot."""
    query = select(named.c.name).join(table, table.c[f"{named.name}_id"] == named.c.id)
    return frozenset(connection.execute(query.where(table.c.shot_id == shot_id)).scalars())


def _derived(
    connection: Connection, shot: Row[Any], machine_id: int, stated: Collection[str]
) -> tuple[dict[str, ShotSetting], dict[str, ShotReading]]:
    """Return the derived quantities of a shot; parameters only where the shot has all that they are made of."""
    makings = Makings(connection)
    quantities = makings.quantities(machine_id)
    names = {
        role: [
            name
            for name, derived in quantities.items()
            if derived.role == role and set(derived.parameters) <= set(stated)
        ]
        for role in ("parameter", "observable")
    }
    if not any(names.values()):
        return {}, {}
    expressions = makings.expressions(machine_id)
    settings, readings = (makings.named(role, machine_id, own) for role, own in names.items())
    values = setting_columns(connection, [shot], settings, None)
    read = reading_columns(connection, [shot], readings, None)
    swept = declared_names(connection, shot.id)
    return (
        {
            item.name: ShotSetting(
                float(values[item.name][0]), item.unit, item.name in swept, expressions[item.name]
            )
            for item in settings
        },
        {
            item.name: ShotReading(
                float(value[0]), _known(stderr[0]), item.unit, None, None, expressions[item.name]
            )
            for item in readings
            for value, stderr in [read[item.name]]
        },
    )


def _known(stderr: float) -> float | None:
    return None if stderr != stderr else float(stderr)


def _readings(connection: Connection, shot_id: int) -> dict[str, ShotReading]:
    reading, observable, derivation = tables.reading, tables.observable, tables.derivation
    rows = connection.execute(
        select(reading, observable.c.name, observable.c.unit, derivation.c.name.label("by"))
        .join(observable, observable.c.id == reading.c.observable_id)
        .outerjoin(derivation, derivation.c.id == reading.c.derivation_id)
        .where(reading.c.shot_id == shot_id)
        .order_by(observable.c.name)
    )
    return {
        row.name: ShotReading(read_value(row.value, row.state), row.stderr, row.unit or "", row.state, row.by)
        for row in rows
    }
