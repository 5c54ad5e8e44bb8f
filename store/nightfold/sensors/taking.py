"""Taking readings batch by batch, each one transaction: nothing is half-written, and all can be sent again."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

import numpy as np
from sqlalchemy import Connection, update

from nightfold import tables
from nightfold.errors import RecordError, UnitError
from nightfold.ledger.batches import batches, collector_paused
from nightfold.ledger.names import Known, MachineNames, Names, insert_row
from nightfold.ledger.outcome import Incoming, Intake, Refused
from nightfold.ledger.sources import SourceLog
from nightfold.records import shorten
from nightfold.sensors.keeping import (
    Flags,
    Series,
    contradicted,
    hours_of,
    keep_readings,
    load_hours,
    repeated,
)
from nightfold.sensors.moments import Stated, at_us_of, machine_of, readings_of
from nightfold.session import Session
from nightfold.units import Conversion, conversion, parse_unit

BATCH = 5000


def take_readings(
    session: Session,
    records: Iterable[Incoming],
    *,
    machine: str | None = None,
    log: SourceLog | None = None,
    progress: Callable[[int], None] | None = None,
) -> Intake:
    """Take records of readings and return how many readings were new and known, and which records were refused.

    Parameters
    ----------
    session : Session
    records : iterable of Incoming
    machine : str, optional
        Of records that do not name theirs.
    log : SourceLog, optional
        The file they come from.
    progress : callable, optional
        Called after each batch with the offset of its last record.

    Notes
    -----
    A record is taken whole or refused whole. If anything is raised, the batches before it stay and everything can be
    handed over again: what is stored is then known.
    """
    total = Intake()
    for items in batches(records, BATCH):
        with collector_paused(), session.writing() as connection:
            if log is not None:
                log.enter(connection)
            batch = _Batch(connection, machine)
            for place, item in enumerate(items):
                batch.add(place, item)
            batch.refuse_contradictions()
            new, known = batch.write()
            refused = [(items[place], problem) for place, problem in sorted(batch.refused.items())]
            if log is not None:
                log.save(connection, items, refused)
        lines = [Refused(item.source, item.line, str(problem)) for item, problem in refused]
        total = total + Intake(new, known, 0, lines)
        if progress is not None:
            progress(items[-1].byte)
    return total


@dataclass(slots=True)
class _Column:
    """What one sensor shows in a batch, in the unit stored; `items` are the places of the records."""

    machine: MachineNames
    name: str
    known: Known
    at_us: list[int] = field(default_factory=list)
    values: list[float] = field(default_factory=list)
    items: list[int] = field(default_factory=list)
    stored: dict[int, Series] = field(default_factory=dict)

    @property
    def series(self) -> Series:
        return Series(np.array(self.at_us, np.int64), np.array(self.values, np.float64))

    def problem(self, found: float, wanted: float) -> RecordError:
        """Return the refusal of a reading that says otherwise than one taken before."""
        unit = f" {self.known.unit}" if self.known.unit else ""
        return RecordError(
            f"readings.{self.name}",
            f"{found!r}{unit}",
            f"{wanted!r}{unit}, which was taken before for this moment; what was read is never overwritten",
        )


_Home = tuple[Known, Conversion | None]


class _Batch:
    """The records of one transaction on their way into the store."""

    def __init__(self, connection: Connection, machine: str | None) -> None:
        self._connection, self._default = connection, machine
        self._names = Names()
        self._names.load(connection)
        self._machines: dict[str, MachineNames] = {}
        self._columns: dict[tuple[str, str], _Column] = {}
        self._homes: dict[tuple[str, str, str | None], _Home] = {}
        self.refused: dict[int, RecordError] = {}

    def add(self, place: int, item: Incoming) -> None:
        """Check a record and keep its readings in mind, or refuse it."""
        try:
            if item.record is None:
                raise item.problem or RecordError("", "nothing", "one JSON object a line")
            machine = self._machine(machine_of(item.record, self._default))
            at_us = at_us_of(item.record, machine)
            stated = readings_of(item.record)
            homes = [self._home(machine, one) for one in stated]
        except RecordError as problem:
            self.refused[place] = problem
            return
        for one, (known, rule) in zip(stated, homes, strict=True):
            column = self._column(machine, one.name, known)
            column.at_us.append(at_us)
            column.values.append(one.value if rule is None else rule.value(one.value))
            column.items.append(place)

    def _machine(self, name: str) -> MachineNames:
        if name not in self._machines:
            self._machines[name] = self._names.find(name)
        return self._machines[name]

    def _home(self, machine: MachineNames, one: Stated) -> _Home:
        """Return what is known of a sensor with this reading, and how it is converted.

        Raises
        ------
        RecordError
        """
        key = (machine.name, one.name, one.unit)
        home = self._homes.get(key)
        if home is not None and (one.name not in machine.sensors or machine.sensors[one.name] is home[0]):
            return home
        path = f"readings.{one.name}"
        known = machine.settle_sensor(one.name, one.unit, path)
        stated = known.bare if one.unit is None else one.unit
        rule = None
        if stated is not None and known.unit is not None and stated != known.unit:
            try:
                rule = conversion(parse_unit(stated), known.unit)
            except UnitError as problem:
                raise RecordError(f"{path}.unit", shorten(stated), str(problem)) from None
            rule = None if rule.source == rule.target else rule
        self._homes[key] = known, rule
        return known, rule

    def _column(self, machine: MachineNames, name: str, known: Known) -> _Column:
        key = (machine.name, name)
        column = self._columns.get(key)
        if column is None:
            column = self._columns[key] = _Column(machine, name, known)
        if machine.sensors.get(name) is not known:
            column.known = machine.sensors[name] = known
        return column

    def refuse_contradictions(self) -> None:
        """Refuse records that say otherwise than the store, or than an earlier record of the batch."""
        for column in self._columns.values():
            series = column.series
            if column.known.id is not None:
                hours = hours_of(series.at_us)
                column.stored = load_hours(self._connection, column.known.id, hours)
            stored = Series.joined(list(column.stored.values()))
            for k in np.flatnonzero(contradicted(stored, series)[1]).tolist():
                before = stored.values[np.searchsorted(stored.at_us, series.at_us[k])]
                self.refused.setdefault(column.items[k], column.problem(column.values[k], float(before)))
        self._refuse_among_themselves()

    def _refuse_among_themselves(self) -> None:
        """Go through the records that contradict each other in their order; the first one counts."""
        disputed: dict[int, list[tuple[_Column, int]]] = {}
        for column in self._columns.values():
            series, left = column.series, self._not_refused(column)
            other = np.zeros(len(left), bool)
            other[left] = repeated(series.where(left))[1]
            for k in np.flatnonzero(left & np.isin(series.at_us, series.at_us[other])).tolist():
                disputed.setdefault(column.items[k], []).append((column, k))
        said: dict[tuple[int, int], float] = {}
        for place in sorted(disputed):
            for column, k in disputed[place]:
                value = column.values[k]
                before = said.get((id(column), column.at_us[k]), value)
                if before != value and (before == before or value == value):
                    self.refused.setdefault(place, column.problem(value, before))
            if place not in self.refused:
                said |= {(id(column), column.at_us[k]): column.values[k] for column, k in disputed[place]}

    def _not_refused(self, column: _Column) -> Flags:
        if not self.refused:
            return np.ones(len(column.items), bool)
        return ~np.isin(column.items, list(self.refused))

    def write(self) -> tuple[int, int]:
        """Write what was not refused; return how many readings were new and how many known."""
        new = taken = 0
        for column in self._columns.values():
            series = column.series.where(self._not_refused(column))
            if not len(series.at_us):
                continue
            taken += len(series.at_us)
            known = contradicted(Series.joined(list(column.stored.values())), series)[0]
            fresh = series.where(~known & ~repeated(series)[0])
            keep_readings(self._connection, self._enter(column), column.stored, fresh)
            new += len(fresh.at_us)
        return new, taken - new

    def _enter(self, column: _Column) -> int:
        """Return the id of a sensor; an unknown one is entered, and a unit first stated now is kept."""
        table, known, machine = tables.sensor, column.known, column.machine
        self._names.enter(self._connection, machine)
        if known.id is None:
            row = {"machine_id": machine.id, "name": column.name, "unit": known.unit}
            return insert_row(self._connection, table, row)
        this = (table.c.id == known.id) & table.c.unit.is_distinct_from(known.unit)
        self._connection.execute(update(table).where(this).values(unit=known.unit))
        return known.id
