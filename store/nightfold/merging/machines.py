"""Merging one machine into another: a control program said `Heron` for a night, and the machine is `heron`.

Everything stored under the old name becomes the other machine's in one transaction, and the old name means that machine
from then on. Names are matched by name, sequences too; scans are folded again as if the shots had come late.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, and_, delete, func, insert, select, update

from nightfold import tables
from nightfold.card import without_cloud
from nightfold.errors import MergeError
from nightfold.ledger.correcting import digests_before
from nightfold.ledger.deriving import release_derived
from nightfold.ledger.names import MachineNames, Names
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import DOUBLE, find_machine
from nightfold.ledger.setting_aside import clean_reason
from nightfold.merging.objections import KINDS, find_objections
from nightfold.merging.rows import own_sets, point_to, rename_sets
from nightfold.merging.streams import Progress, fold_again, join_sequences, own_shots
from nightfold.merging.versions import join_versions
from nightfold.schema import copy_beside
from nightfold.sensors.keeping import Series, contradicted, keep_readings, load_hours
from nightfold.session import Session
from nightfold.timestamps import now_us

_TABLES = {"parameters": tables.parameter, "observables": tables.observable, "sensors": tables.sensor}


@dataclass(frozen=True, slots=True)
class MergeReport:
    """What was merged.

    Attributes
    ----------
    old, into : str
    shots : int
        Shots that were the old machine's.
    sequences, shared_sequences : int
        Its sequences, and how many of them the other machine had too.
    names, shared_names : int
        Its parameters, observables and sensors, and how many of them the other machine had too.
    doubles : int
        Shots that were there under both names; one of each two is set aside.
    scans : int
        Scans that its shots are in now.
    copy : Path or None
        The file as it was; None for a database.
    dry_run : bool
        Whether nothing was changed.
    """

    old: str
    into: str
    shots: int
    sequences: int
    shared_sequences: int
    names: int
    shared_names: int
    doubles: int
    scans: int
    copy: Path | None = None
    dry_run: bool = False


class _Undo(Exception):
    """Raised to leave a trial without a trace."""


def merge_machines(
    session: Session,
    old: str,
    into: str,
    *,
    reason: str,
    by: str | None = None,
    progress: Progress | None = None,
    dry_run: bool = False,
) -> MergeReport:
    """Make everything of one machine another's.

    Raises
    ------
    NotFound, MergeError, ValueError
        As `Store.merge_machines`.
    """
    reason = clean_reason("merge", reason)
    report, copy = None, None
    try:
        with session.writing() as connection:
            machines = _find_both(connection, old, into)
            if objections := find_objections(connection, *machines):
                raise MergeError(old, machines[1].name, objections)
            copy = None if dry_run or session.place.path is None else copy_beside(session, "merge")
            report = replace(_merge(connection, *machines, reason, by, progress), copy=copy, dry_run=dry_run)
            if dry_run:
                raise _Undo
    except _Undo:
        pass
    except BaseException:
        if copy is not None:
            copy.unlink(missing_ok=True)  # nothing was changed
        raise
    assert report is not None
    return report


def _find_both(connection: Connection, old: str, into: str) -> tuple[MachineNames, MachineNames]:
    names = Names()
    names.load(connection)
    found = (
        names.machines[find_machine(connection, old).name],
        names.machines[find_machine(connection, into).name],
    )
    if found[0].name != old:
        raise MergeError(old, into, [f"{old} is another name of {found[0].name} already"])
    if found[0] is found[1]:
        raise MergeError(old, into, ["these are the same machine"])
    return found


def _merge(
    connection: Connection,
    old: MachineNames,
    into: MachineNames,
    reason: str,
    by: str | None,
    progress: Progress | None,
) -> MergeReport:
    at_us = now_us()
    if into.card is not None and (wrong := release_derived(connection, old, into.card)):
        raise MergeError(old.name, into.name, wrong)
    doubles = _set_doubles_aside(connection, old, into, by, at_us)
    count, shots, labels = (
        _count_shots(connection, old.id),
        own_shots(connection, old.id),
        _labels(connection, old.id),
    )
    shared = {kind: getattr(old, kind).keys() & getattr(into, kind).keys() for kind in KINDS}
    sets = own_sets(connection, old.id)
    for name in shared["sensors"]:
        _move_hours(connection, old.sensors[name].id or 0, into.sensors[name].id or 0)
    for kind, table in _TABLES.items():
        _settle_units(connection, kind, old, into)
        ours, theirs = getattr(old, kind), getattr(into, kind)
        point_to(connection, table, {ours[name].id: theirs[name].id for name in shared[kind]})
        connection.execute(update(table).where(table.c.machine_id == old.id).values(machine_id=into.id))
    rename_sets(connection, sets, old.name, into.name)
    join_versions(connection, old, into)
    sequences = join_sequences(connection, old, into)
    _rename_notes(connection, old.name, into.name)
    _make_alias(connection, old, into, reason, by, at_us)
    fold_again(
        connection,
        into,
        {sequences[key]: rows for key, rows in shots.items()},
        {sequences[key]: found for key, found in labels.items()},
        progress,
    )
    return MergeReport(
        old=old.name,
        into=into.name,
        shots=count,
        sequences=len(old.sequences),
        shared_sequences=len(old.sequences.keys() & into.sequences.keys()),
        names=sum(len(getattr(old, kind)) for kind in KINDS),
        shared_names=sum(map(len, shared.values())),
        doubles=doubles,
        scans=_count_scans(connection, [row.id for rows in shots.values() for row in rows]),
    )


def _count_shots(connection: Connection, machine_id: int) -> int:
    shot, sequence = tables.shot, tables.sequence
    own = select(sequence.c.id).where(sequence.c.machine_id == machine_id)
    query = select(func.count()).select_from(shot).where(shot.c.sequence_id.in_(own))
    return int(connection.execute(query).scalar_one())


def _labels(connection: Connection, machine_id: int) -> dict[int, set[str]]:
    scan, sequence = tables.scan, tables.sequence
    query = select(scan.c.sequence_id, scan.c.label).join(sequence, sequence.c.id == scan.c.sequence_id)
    found: dict[int, set[str]] = {}
    for row in connection.execute(query.where(sequence.c.machine_id == machine_id, scan.c.label.isnot(None))):
        found.setdefault(row.sequence_id, set()).add(row.label)
    return found


def _count_scans(connection: Connection, shot_ids: Iterable[int]) -> int:
    shot = tables.shot
    found: set[int | None] = set()
    for part in chunks(list(shot_ids)):
        found.update(
            connection.execute(select(shot.c.scan_id).where(shot.c.id.in_(part)).distinct()).scalars()
        )
    return len(found - {None})


def _set_doubles_aside(
    connection: Connection, old: MachineNames, into: MachineNames, by: str | None, at_us: int
) -> int:
    """Set one of two shots aside that are the same: of one time, sequence and settings, as taken or as corrected.

    It is the one of the old machine, unless only that one was corrected.
    """
    ours, theirs = tables.shot.alias("ours"), tables.shot.alias("theirs")
    aside: dict[int, str] = {}
    for name in sorted(old.sequences.keys() & into.sequences.keys()):
        together = and_(
            theirs.c.started_us == ours.c.started_us, theirs.c.sequence_id == into.sequences[name]
        )
        query = select(
            ours.c.id, ours.c.uid, ours.c.values_digest,
            theirs.c.id.label("other"), theirs.c.uid.label("other_uid"), theirs.c.values_digest.label("other_digest"),
        ).join(theirs, together)  # fmt: skip
        for row in connection.execute(query.where(ours.c.sequence_id == old.sequences[name])).all():
            digests, other_digests = {bytes(row.values_digest)}, {bytes(row.other_digest)}
            if digests != other_digests:
                digests |= digests_before(connection, row.id)
                other_digests |= digests_before(connection, row.other)
            if len(digests) > 1 and len(other_digests) == 1 and other_digests <= digests:
                aside[row.other] = row.uid
            elif not digests.isdisjoint(other_digests):
                aside[row.id] = row.other_uid
    why = "the same shot as {}, taken under both names of " + into.name
    rows = [
        {"shot_id": key, "reason": why.format(uid), "by": by, "rule": DOUBLE, "at_us": at_us}
        for key, uid in aside.items()
    ]
    if rows:
        connection.execute(insert(tables.set_aside), rows)
    return len(rows)


def _settle_units(connection: Connection, kind: str, old: MachineNames, into: MachineNames) -> None:
    """Enter the units that names without one have from the other machine, its card, or another cloud."""
    table = _TABLES[kind]
    for machine in (old, into):
        for name, known in getattr(machine, kind).items():
            unit = _unit(kind, name, old, into)
            if known.unit is None and unit is not None and known.kind in ("number", "reading"):
                connection.execute(update(table).where(table.c.id == known.id).values(unit=unit))


def _unit(kind: str, name: str, old: MachineNames, into: MachineNames) -> str | None:
    known = [machine[name].unit for machine in (getattr(into, kind), getattr(old, kind)) if name in machine]
    if into.card is not None:
        entry = into.card.observable(name) if kind == "observables" else getattr(into.card, kind).get(name)
        known.append(entry.unit if entry else None)
    if kind == "observables":
        base = without_cloud(name)
        known += [into.cloud_units.get(base), old.cloud_units.get(base)]
    return next((unit for unit in known if unit is not None), None)


def _move_hours(connection: Connection, ours: int, theirs: int) -> None:
    """Bring the readings of one sensor into the hours of another; those that are there already are left out."""
    hour = tables.sensor_hour
    hours = select(hour.c.hour).where(hour.c.sensor_id == ours).order_by(hour.c.hour)
    for part in chunks(list(connection.execute(hours).scalars())):
        stored = load_hours(connection, theirs, part)
        moving = load_hours(connection, ours, part)
        fresh = [
            series.where(~contradicted(stored[key], series)[0]) if key in stored else series
            for key, series in moving.items()
        ]
        keep_readings(connection, theirs, stored, Series.joined(fresh))
        connection.execute(delete(hour).where(hour.c.sensor_id == ours, hour.c.hour.in_(part)))


def _rename_notes(connection: Connection, old: str, into: str) -> None:
    note = tables.note
    begin = f"night {old} "
    query = select(note.c.id, note.c.subject).where(note.c.subject.startswith(begin, autoescape=True))
    for row in connection.execute(query).all():
        night = row.subject.removeprefix(begin)
        if " " not in night:  # else it is that of another machine, whose name begins so
            this = note.c.id == row.id
            connection.execute(update(note).where(this).values(subject=f"night {into} {night}"))


def _make_alias(
    connection: Connection, old: MachineNames, into: MachineNames, reason: str, by: str | None, at_us: int
) -> None:
    """Let the old name mean the other machine, and remove the machine that is now without anything."""
    row: Mapping[str, Any] = {
        "name": old.name,
        "machine_id": into.id,
        "by": by,
        "reason": reason,
        "at_us": at_us,
    }
    for table in (tables.machine_alias, tables.card):
        connection.execute(update(table).where(table.c.machine_id == old.id).values(machine_id=into.id))
    connection.execute(insert(tables.machine_alias).values(**row))
    connection.execute(delete(tables.machine).where(tables.machine.c.id == old.id))
