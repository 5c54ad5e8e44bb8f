"""What happened to a shot since it was taken, and which reading held from when to when."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from itertools import pairwise
from typing import Any

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.ledger.columns import read_value
from nightfold.ledger.notes import shot_subject
from nightfold.ledger.selecting import scan_key
from nightfold.ledger.setting_aside import find_shots
from nightfold.ledger.undoing import correction_numbers
from nightfold.settings import plain_value
from nightfold.timestamps import from_us


@dataclass(frozen=True, slots=True)
class HeldReading:
    """A reading, and when it held.

    Attributes
    ----------
    value : float
        NaN where there is none; `state` then says why.
    stderr : float or None
    unit : str
    state : str or None
    derivation, version : str or None
        How it was obtained.
    since : datetime or None
        From when on it stood; None for the first one, which came with the shot or at an unknown time after it.
    until : datetime or None
        When another one took its place; None for the one that holds.
    """

    value: float
    stderr: float | None
    unit: str
    state: str | None
    derivation: str | None
    version: str | None
    since: datetime | None
    until: datetime | None


@dataclass(frozen=True, slots=True)
class FitUse:
    """A kept fit that looked at the shot.

    Attributes
    ----------
    fit : int
        Its id.
    at : datetime
    scan, model, observable, along : str
    role : {'used', 'set aside', 'outlier', 'no value'}
        What the shot was in it.
    state : {'fresh', 'stale', 'replaced'}
        Whether its data are still those of today, and whether a newer fit has taken its place.
    """

    fit: int
    at: datetime
    scan: str
    model: str
    observable: str
    along: str
    role: str
    state: str


@dataclass(frozen=True, slots=True)
class ShotEvent:
    """One thing that happened to a shot.

    Attributes
    ----------
    at : datetime
        UTC.
    kind : str
        ``taken``, ``reading`` (replaced), ``record`` (another one came), ``corrected``, ``set aside``, ``put back``,
        ``join``, ``split``, ``join undone``, ``split undone``, ``note`` or ``fit``.
    what : str
        The observable, parameter, fit or place it is about; the text of a note; of a ``record`` the observables,
        with commas, whose first reading it may have brought.
    old, new : Any
        Before and after: a `HeldReading` each, the values of a setting, or the keys of scans; None where there is
        nothing to compare, or a scan is gone. `new` of a fit is a `FitUse`.
    unit : str
    by, why : str or None
        Who did it, and the reason given.
    number : int or None
        Of a correction, to undo it by.
    """

    at: datetime
    kind: str
    what: str
    old: Any = None
    new: Any = None
    unit: str = ""
    by: str | None = None
    why: str | None = None
    number: int | None = None


@dataclass(frozen=True, slots=True)
class ShotHistory:
    """Everything that happened to one shot.

    Attributes
    ----------
    uid : str
    started : datetime
    machine : str
    events : tuple of ShotEvent
        In time order, the taking first.
    readings : dict of str to tuple of HeldReading
        Of each observable every reading it ever had, the one that holds last.
    """

    uid: str
    started: datetime
    machine: str
    events: tuple[ShotEvent, ...]
    readings: dict[str, tuple[HeldReading, ...]]

    @property
    def fits(self) -> tuple[FitUse, ...]:
        """The kept fits that looked at the shot, oldest first."""
        return tuple(event.new for event in self.events if event.kind == "fit")

    @property
    def changed(self) -> bool:
        """Whether a setting was corrected or a reading replaced."""
        return any(event.kind in ("corrected", "reading") for event in self.events)


def read_history(connection: Connection, uid: str, stale: Collection[int]) -> ShotHistory:
    """Return the history of a shot.

    Parameters
    ----------
    uid : str
        Or the beginning of it.
    stale : collection of int
        Ids of fits whose data have changed since.

    Raises
    ------
    NotFound
    """
    shot = next(iter(find_shots(connection, [uid]).values()))
    machine = connection.execute(
        select(tables.machine.c.name)
        .join(tables.sequence, tables.sequence.c.machine_id == tables.machine.c.id)
        .where(tables.sequence.c.id == shot.sequence_id)
    ).scalar_one()
    readings = _readings(connection, shot.id)
    path = connection.execute(
        select(tables.source.c.path).where(tables.source.c.id == shot.source_id)
    ).scalar()
    taken = ShotEvent(from_us(shot.started_us), "taken", f"{path}:{shot.line}" if path else "")
    dated = [
        *_replacements(readings),
        *_corrections(connection, shot.id),
        *_asides(connection, shot.id),
        *_arrangements(connection, shot),
        *_notes(connection, shot.id),
    ]
    dated += _other_records(connection, shot.id, {event.at for event in dated}, readings)
    dated += _fits(connection, shot.id, stale)
    events = (taken, *sorted(dated, key=lambda event: event.at))
    return ShotHistory(shot.uid, from_us(shot.started_us), machine, events, readings)


def _readings(connection: Connection, shot_id: int) -> dict[str, tuple[HeldReading, ...]]:
    """Return every reading of a shot by observable, the one that holds last."""
    observable, derivation = tables.observable, tables.derivation
    found: dict[str, list[HeldReading]] = {}
    for table in (tables.past_reading, tables.reading):
        query = (
            select(
                table,
                observable.c.name,
                observable.c.unit,
                derivation.c.name.label("by"),
                derivation.c.version,
            )
            .join(observable, observable.c.id == table.c.observable_id)
            .outerjoin(derivation, derivation.c.id == table.c.derivation_id)
            .where(table.c.shot_id == shot_id)
        )
        order = [table.c.id] if "id" in table.c else []
        for row in connection.execute(query.order_by(observable.c.name, *order)):
            own = found.setdefault(row.name, [])
            until = from_us(row.until_us) if "until_us" in table.c else None
            own.append(_held(row, own[-1].until if own else None, until))
    return {name: tuple(found[name]) for name in sorted(found)}


def _held(row: Row[Any], since: datetime | None, until: datetime | None) -> HeldReading:
    value = read_value(row.value, row.state)
    return HeldReading(
        value, row.stderr, row.unit or "", row.state, row.by, row.version or None, since, until
    )


def _replacements(readings: Mapping[str, tuple[HeldReading, ...]]) -> Iterator[ShotEvent]:
    for name, held in readings.items():
        for old, new in pairwise(held):
            assert old.until is not None
            yield ShotEvent(old.until, "reading", name, old, new, new.unit)


def _corrections(connection: Connection, shot_id: int) -> Iterator[ShotEvent]:
    table, parameter = tables.correction, tables.parameter
    query = (
        select(table, parameter.c.name, parameter.c.kind, parameter.c.unit)
        .join(parameter, parameter.c.id == table.c.parameter_id)
        .where(table.c.shot_id == shot_id)
        .order_by(table.c.id)
    )
    rows = connection.execute(query).all()
    numbers = correction_numbers(connection, [row.at_us for row in rows])
    for row in rows:
        old = plain_value(row.kind, row.old_num, row.old_exact)
        new = plain_value(row.kind, row.new_num, row.new_exact)
        at, number = from_us(row.at_us), numbers[row.at_us]
        yield ShotEvent(at, "corrected", row.name, old, new, row.unit or "", row.by, row.reason, number)


def _asides(connection: Connection, shot_id: int) -> Iterator[ShotEvent]:
    table = tables.set_aside
    for row in connection.execute(select(table).where(table.c.shot_id == shot_id).order_by(table.c.id)):
        what = "its record says so" if row.rule == "failed" else row.rule or ""
        yield ShotEvent(from_us(row.at_us), "set aside", what, by=row.by, why=row.reason)
        if row.lifted_us is not None:
            yield ShotEvent(from_us(row.lifted_us), "put back", "", by=row.lifted_by)


def _arrangements(connection: Connection, shot: Row[Any]) -> Iterator[ShotEvent]:
    """Yield joins and splits; of one that was undone a scan that may be gone is not named: another may have its id."""
    row, whole, scan = tables.arranged, tables.arrangement, tables.scan
    query = (
        select(row.c.from_scan, row.c.to_scan, whole)
        .join(whole, whole.c.id == row.c.arrangement_id)
        .where(row.c.shot_id == shot.id, row.c.from_scan != row.c.to_scan)
        .order_by(whole.c.id)
    )
    for item in connection.execute(query).all():
        standing = item.undone_us is None
        held = (item.from_scan, item.to_scan) if standing else (shot.scan_id,)
        there = select(scan.c.id, scan.c.label, scan.c.round).where(scan.c.id.in_(held))
        keys = {found.id: scan_key(*found) for found in connection.execute(there)}
        old, new = keys.get(item.from_scan), keys.get(item.to_scan)
        yield ShotEvent(from_us(item.at_us), item.kind, "scan", old, new, by=item.by, why=item.reason)
        if not standing:
            at = from_us(item.undone_us)
            yield ShotEvent(at, f"{item.kind} undone", "scan", new, old, by=item.undone_by)


def _notes(connection: Connection, shot_id: int) -> Iterator[ShotEvent]:
    table = tables.note
    query = select(table).where(table.c.subject == shot_subject(shot_id)).order_by(table.c.at_us, table.c.id)
    for row in connection.execute(query):
        yield ShotEvent(from_us(row.at_us), "note", row.text, by=row.by)


def _other_records(
    connection: Connection,
    shot_id: int,
    known: Collection[datetime],
    readings: Mapping[str, tuple[HeldReading, ...]],
) -> list[ShotEvent]:
    """Return when records came of which no other event tells, and which first readings one of them may have brought.

    When a first reading came is not kept. Those with a derivation are of an analysis, often later than the shot.
    """
    table = tables.amendment
    moments = connection.execute(select(table.c.at_us).where(table.c.shot_id == shot_id)).scalars()
    perhaps = ", ".join(name for name, held in readings.items() if held[0].derivation is not None)
    return [ShotEvent(at, "record", perhaps) for at in sorted({from_us(us) for us in moments} - set(known))]


def _fits(connection: Connection, shot_id: int, stale: Collection[int]) -> list[ShotEvent]:
    fit, use, scan, observable = tables.fit, tables.fit_shot, tables.scan, tables.observable
    newer = fit.alias("newer")
    query = (
        select(
            fit.c.id, fit.c.at_us, fit.c.model, fit.c.along, use.c.role, observable.c.name,
            fit.c.scan_id, scan.c.label, scan.c.round, newer.c.id.label("newer"),
        )
        .join(use, use.c.fit_id == fit.c.id)
        .join(observable, observable.c.id == fit.c.observable_id)
        .join(scan, scan.c.id == fit.c.scan_id)
        .outerjoin(newer, newer.c.replaces == fit.c.id)
        .where(use.c.shot_id == shot_id)
        .order_by(fit.c.id)
    )  # fmt: skip
    events = []
    for row in connection.execute(query):
        state = "replaced" if row.newer is not None else "stale" if row.id in stale else "fresh"
        key = scan_key(row.scan_id, row.label, row.round) or ""
        at = from_us(row.at_us)
        used = FitUse(row.id, at, key, row.model, row.name, row.along, row.role, state)
        events.append(ShotEvent(at, "fit", f"fit {row.id}", new=used))
    return events
