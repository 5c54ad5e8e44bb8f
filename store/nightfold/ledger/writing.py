"""Taking records batch by batch, each one transaction: nothing is half-written, and all can be sent again."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.amending import amend_readings, amend_shot, check_frames, check_identity
from nightfold.ledger.batches import batches, collector_paused
from nightfold.ledger.checking import CheckedShot, check_shot, readings_of, sequence_name
from nightfold.ledger.correcting import find_corrected
from nightfold.ledger.exported import amendment_of
from nightfold.ledger.inserting import insert_sets, insert_shots
from nightfold.ledger.names import Names
from nightfold.ledger.outcome import Incoming, Intake, Refused
from nightfold.ledger.rows import chunks, next_id
from nightfold.ledger.selecting import is_double
from nightfold.ledger.sources import SourceLog
from nightfold.ledger.streams import StreamMemory, recall
from nightfold.records import Amendment, ShotRecord, parse_record
from nightfold.session import Session, turn_of
from nightfold.timestamps import now_us


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
        for batch in batches(records):
            total = total + self._take_batch(batch, log)
            if progress is not None:
                progress(batch[-1].byte)
        return total

    def _take_batch(self, items: Sequence[Incoming], log: SourceLog | None) -> Intake:
        try:
            with collector_paused(), self._session.writing() as connection:
                self._refresh(connection)
                batch = _Batch(connection, log.enter(connection) if log else None)
                for item in items:
                    self._check(batch, item)
                self._settle_all(batch)
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
            if item.partial and (late := self._of_exported(batch, record)) is not None:
                batch.checked.append((item, late))
                return
            machine = self._names.find(record.machine)
            key = (machine.name, sequence_name(record))
            memory = self._streams.get(key)
            if memory is None:
                sequence_id = machine.sequences.get(key[1])
                memory = StreamMemory()
                if sequence_id is not None:
                    memory = recall(batch.connection, machine, sequence_id)
                self._streams[key] = memory
            shot, plan = check_shot(record, machine, memory)
            if shot.set_digest not in self._sets:
                moving = shot.moving
                shot.resting = {name: entry for name, entry in memory.entries.items() if name not in moving}
            if plan or not machine.id:
                try:
                    self._check_twin(batch, shot)
                except RecordError:
                    del self._streams[
                        key
                    ]  # it remembers a shot that is not taken; the next one recalls it afresh
                    raise
            self._names.enter(batch.connection, machine)
            self._names.keep(batch.connection, machine, plan)
            shot.source_id = batch.source_id
            shot.line = item.line if batch.source_id is not None else None
            batch.checked.append((item, shot))
        except RecordError as problem:
            batch.refused.append((item, problem))

    def _of_exported(self, batch: _Batch, record: ShotRecord) -> _Late | None:
        """Return what a row of an exported table brings to its shot; None if that is not in the store.

        Raises
        ------
        RecordError
        """
        if record.uid is None:
            return None
        self._look_up(batch, [record.uid])
        stored = batch.stored.get(record.uid)
        if stored is None:
            return None
        machine = self._names.find(record.machine)
        return _Late(amendment_of(batch.connection, stored, machine, record))

    def _check_twin(self, batch: _Batch, shot: CheckedShot) -> None:
        """Refuse a shot that differs from the one of its uid before any name that it brings is entered.

        Raises
        ------
        RecordError
        """
        if any(_uid(other) == shot.uid for _, other in batch.checked):
            self._settle_all(batch)
        self._look_up(batch, [shot.uid])
        if shot.uid in batch.stored:
            check_identity(batch.connection, batch.stored[shot.uid], shot)

    def _settle_all(self, batch: _Batch) -> None:
        """Write what has been checked: new shots, and amendments of stored ones."""
        self._look_up(batch, [_uid(shot) for _, shot in batch.checked])
        nameless = [shot for _, shot in batch.checked if isinstance(shot, CheckedShot) and not shot.named]
        batch.stored |= find_corrected(batch.connection, [s for s in nameless if s.uid not in batch.stored])
        for item, shot in batch.checked:
            try:
                self._settle(batch, item, shot)
            except RecordError as problem:
                batch.refused.append((item, problem))
        batch.checked.clear()
        self._flush(batch)

    def _look_up(self, batch: _Batch, uids: Sequence[str]) -> None:
        table = tables.shot
        query = select(table, is_double(table.c.id).label("double"))
        for part in chunks(uids):
            for row in batch.connection.execute(query.where(table.c.uid.in_(part))):
                batch.stored[row.uid] = row

    def _settle(self, batch: _Batch, item: Incoming, shot: CheckedShot | _Late) -> None:
        uid = _uid(shot)
        if uid in batch.fresh:
            written = list(batch.fresh)
            self._flush(batch)
            self._look_up(batch, written)
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
        check_frames(batch.connection, stored.id, amendment.frames)
        plan: dict[str, Any] = {}
        readings = readings_of(amendment.observables, machine, plan)
        self._names.keep(batch.connection, machine, plan)
        changed = amend_readings(batch.connection, stored, machine, readings, amendment, now_us())
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
            if shot.structure is not None:
                shot.version_id = self._names.version(
                    connection, shot.machine, shot.sequence_id, *shot.structure
                )
        insert_sets(connection, shots, self._sets)
        self._placer.place(connection, shots)
        insert_shots(connection, shots, self._sets)
        self._placer.fold(connection, shots)
        batch.intake.new += len(shots)


def _uid(shot: CheckedShot | _Late) -> str:
    return shot.amendment.uid if isinstance(shot, _Late) else shot.uid
