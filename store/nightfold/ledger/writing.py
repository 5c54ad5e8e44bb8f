"""Taking records batch by batch, each one transaction: nothing is half-written, and all can be sent again."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from itertools import islice
from typing import Any, Protocol

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.amending import amend_readings, amend_shot, find_derivation, note_subject
from nightfold.ledger.checking import CheckedShot, check_shot, derivation_of, readings_of, sequence_name
from nightfold.ledger.names import Names
from nightfold.ledger.outcome import Incoming, Intake, Refused
from nightfold.ledger.rows import chunks, insert_many, next_id
from nightfold.ledger.sources import SourceLog
from nightfold.ledger.streams import StreamMemory, recall
from nightfold.records import Amendment, parse_record
from nightfold.session import Session, turn_of
from nightfold.timestamps import now_us

BATCH = 500


class ScanPlacer(Protocol):
    """Who decides which scan a shot belongs to (scans are folded above this layer)."""

    def forget(self) -> None:
        """Drop what is remembered of the store."""

    def place(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        """Give labelled shots, which have ids but are not written yet, their `scan_id`."""

    def fold(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        """Fold the streams of shots just written."""


@dataclass(slots=True)
class _Late:
    """An amendment by uid alone, waiting for its shot to be looked up."""

    amendment: Amendment


@dataclass(slots=True)
class _Batch:
    """The records of one transaction on their way into the store."""

    connection: Connection
    source_id: int | None
    intake: Intake = field(default_factory=Intake)
    refused: list[tuple[Incoming, RecordError]] = field(default_factory=list)
    checked: list[tuple[Incoming, CheckedShot | _Late]] = field(default_factory=list)
    stored: dict[str, Row[Any]] = field(default_factory=dict)
    fresh: dict[str, CheckedShot] = field(default_factory=dict)


class Writer:
    """Takes records into a store; keeps names and streams in memory between batches."""

    def __init__(self, session: Session, placer: ScanPlacer) -> None:
        self._session = session
        self._placer = placer
        self._names = Names()
        self._streams: dict[tuple[str, str], StreamMemory] = {}
        self._sets: dict[bytes, int] = {}
        self._turn = -1

    def forget(self) -> None:
        """Drop everything remembered of the store (after a rollback, ids are given out again)."""
        self._names.forget()
        self._streams.clear()
        self._sets.clear()
        self._placer.forget()
        self._turn = -1

    def take(
        self,
        records: Iterable[Incoming],
        log: SourceLog | None = None,
        progress: Callable[[int], None] | None = None,
    ) -> Intake:
        """Take records and return what became of them.

        A batch is one transaction; if anything is raised, the batches before it stay and everything can be handed
        over again: what is stored is then known.
        """
        total = Intake()
        for batch in _batches(records):
            total = total + self._take_batch(batch, log)
            if progress is not None:
                progress(batch[-1].byte)
        return total

    def _take_batch(self, items: Sequence[Incoming], log: SourceLog | None) -> Intake:
        try:
            with self._session.writing() as connection:
                self._refresh(connection)
                batch = _Batch(connection, log.enter(connection) if log else None)
                for item in items:
                    self._check(batch, item)
                self._look_up(batch, [_uid(shot) for _, shot in batch.checked])
                for item, shot in batch.checked:
                    try:
                        self._settle(batch, item, shot)
                    except RecordError as problem:
                        batch.refused.append((item, problem))
                self._flush(batch)
                if log is not None:
                    log.save(connection, items, batch.refused)
        except BaseException:
            self.forget()
            raise
        for item, reason in sorted(batch.refused, key=lambda pair: pair[0].line):
            batch.intake.refused.append(Refused(item.source, item.line, str(reason)))
        return batch.intake

    def _refresh(self, connection: Connection) -> None:
        """Read names again if anybody else wrote since the last batch."""
        turn = turn_of(connection)
        if turn != self._turn + 1:
            self._names.forget()
            self._streams.clear()
            self._placer.forget()
        self._turn = turn
        self._names.load(connection)

    def _check(self, batch: _Batch, item: Incoming) -> None:
        try:
            if item.record is None:
                raise item.problem or RecordError("", "nothing", "one JSON object a line")
            record = parse_record(item.record)
            if isinstance(record, Amendment):
                batch.checked.append((item, _Late(record)))
                return
            machine = self._names.machine(batch.connection, record.machine)
            key = (record.machine, sequence_name(record))
            memory = self._streams.get(key)
            if memory is None:
                sequence_id = machine.sequences.get(key[1])
                memory = StreamMemory()
                if sequence_id is not None:
                    memory = recall(batch.connection, machine, sequence_id)
                self._streams[key] = memory
            shot, plan = check_shot(record, machine, memory)
            self._names.keep(batch.connection, machine, plan)
            if shot.set_digest not in self._sets:
                moving = shot.moving
                shot.resting = {name: entry for name, entry in memory.entries.items() if name not in moving}
            shot.source_id = batch.source_id
            shot.line = item.line if batch.source_id is not None else None
            batch.checked.append((item, shot))
        except RecordError as problem:
            batch.refused.append((item, problem))

    def _look_up(self, batch: _Batch, uids: Sequence[str]) -> None:
        table = tables.shot
        for part in chunks(uids):
            for row in batch.connection.execute(select(table).where(table.c.uid.in_(part))):
                batch.stored[row.uid] = row

    def _settle(self, batch: _Batch, item: Incoming, shot: CheckedShot | _Late) -> None:
        uid = _uid(shot)
        if uid in batch.fresh:
            self._flush(batch)
            self._look_up(batch, [uid])
        stored = batch.stored.get(uid)
        if isinstance(shot, _Late):
            self._amend_by_uid(batch, shot.amendment, stored)
        elif stored is not None:
            changed = amend_shot(batch.connection, stored, shot, now_us())
            self._count(batch, changed)
        else:
            batch.fresh[uid] = shot

    def _amend_by_uid(self, batch: _Batch, amendment: Amendment, stored: Row[Any] | None) -> None:
        if stored is None:
            raise RecordError(
                "uid",
                repr(amendment.uid),
                "the uid of a shot in the store (a shot needs machine, started, sequence)",
            )
        machine = next(
            machine
            for machine in self._names.machines.values()
            if stored.sequence_id in machine.sequences.values()
        )
        plan: dict[str, Any] = {}
        readings = readings_of(amendment.observables, machine, plan)
        self._names.keep(batch.connection, machine, plan)
        derivation = derivation_of(amendment.derivation)
        changed = amend_readings(batch.connection, stored, machine, readings, derivation, now_us())
        self._count(batch, changed)

    @staticmethod
    def _count(batch: _Batch, changed: bool) -> None:
        if changed:
            batch.intake.amended += 1
        else:
            batch.intake.known += 1

    def _flush(self, batch: _Batch) -> None:
        """Write the new shots of the batch."""
        shots = list(batch.fresh.values())
        batch.fresh.clear()
        if not shots:
            return
        connection = batch.connection
        first = next_id(connection, tables.shot)
        for shot_id, shot in enumerate(shots, first):
            shot.id = shot_id
            shot.sequence_id = self._names.sequence(connection, shot.machine, shot.sequence)
        self._make_sets(connection, shots)
        self._placer.place(connection, shots)
        self._insert(connection, shots)
        self._placer.fold(connection, shots)
        batch.intake.new += len(shots)

    def _make_sets(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        missing = {shot.set_digest: shot for shot in shots if shot.set_digest not in self._sets}
        table = tables.value_set
        for part in chunks(sorted(missing)):
            for row in connection.execute(select(table.c.id, table.c.digest).where(table.c.digest.in_(part))):
                self._sets[bytes(row.digest)] = row.id
        new = [digest for digest in sorted(missing) if digest not in self._sets]
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
            self._sets[digest] = set_id
        insert_many(connection, table, rows)
        insert_many(connection, tables.set_value, contents)

    def _insert(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        shot_rows, values, readings, asides, notes, frames = [], [], [], [], [], []
        at_us = now_us()
        for shot in shots:
            version_id = None
            if shot.structure is not None:
                version_id = self._names.version(connection, shot.machine, shot.sequence_id, *shot.structure)
            shot_rows.append((
                shot.id, shot.uid, shot.started_us, shot.sequence_id, version_id, shot.scan_id, shot.reference,
                self._sets[shot.set_digest], shot.values_digest, shot.content_digest, shot.source_id, shot.line,
            ))  # fmt: skip
            parameters, observables = shot.machine.parameters, shot.machine.observables
            swept = shot.wish.swept
            for name, entry in shot.moving.items():
                value = entry.value
                values.append((shot.id, parameters[name].id, value.num, value.exact, name in swept))
            if shot.readings:
                derivation_id = find_derivation(connection, shot.derivation)
                for name, read in shot.readings.items():
                    observable_id = observables[name].id
                    readings.append(
                        (shot.id, observable_id, read.value, read.stderr, read.state, derivation_id)
                    )
            if shot.failed is not None:
                asides.append({"shot_id": shot.id, "reason": shot.failed, "rule": "failed", "at_us": at_us})
            if shot.note:
                notes.append({"subject": note_subject(shot.id), "text": shot.note, "at_us": at_us})
            frames += [(shot.id, frame.camera, frame.role, frame.path, None) for frame in shot.frames]
        insert_many(connection, tables.shot, shot_rows)
        insert_many(connection, tables.shot_value, values)
        insert_many(connection, tables.reading, readings)
        insert_many(connection, tables.frame, frames)
        for table, rows in ((tables.set_aside, asides), (tables.note, notes)):
            if rows:
                connection.execute(table.insert(), rows)


def _uid(shot: CheckedShot | _Late) -> str:
    return shot.amendment.uid if isinstance(shot, _Late) else shot.uid


def _batches(records: Iterable[Incoming]) -> Iterator[Sequence[Incoming]]:
    stream = iter(records)
    while batch := list(islice(stream, BATCH)):
        yield batch
