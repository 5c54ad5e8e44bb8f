"""What the store knows by name: machines, their parameters and observables with kind and unit, sequences.

A writer keeps this in memory. It is read again whenever another writer has changed the store, and forgotten after a
rollback (SQLite gives the same ids out again). Nothing here is written before a whole record has been found good.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Table, func, insert, select, update

from nightfold import tables
from nightfold.card import MachineCard, parse_card, without_cloud
from nightfold.errors import CardError, RecordError, UnitError
from nightfold.records import shorten
from nightfold.settings import ReadValue, Value
from nightfold.units import conversion, convertible, parse_unit

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo


@dataclass(frozen=True, slots=True)
class Known:
    """A parameter, observable or sensor: kind (``reading`` for the last two), the unit stored, that of bare numbers."""

    kind: str
    unit: str | None
    bare: str | None
    id: int | None = None


@dataclass(slots=True)
class MachineNames:
    """Everything known by name of one machine; the id is 0 while it is not in the store."""

    id: int
    name: str
    zone: str = "UTC"
    card: MachineCard | None = None
    parameters: dict[str, Known] = field(default_factory=dict)
    observables: dict[str, Known] = field(default_factory=dict)
    sensors: dict[str, Known] = field(default_factory=dict)
    sequences: dict[str, int] = field(default_factory=dict)
    versions: dict[tuple[int, bytes], int] = field(default_factory=dict)
    cloud_units: dict[str, str] = field(default_factory=dict)
    generation: int = 0

    @property
    def naive_zone(self) -> ZoneInfo | None:
        """The zone in which times without an offset are read; None where the card does not opt in."""
        from nightfold.timestamps import find_zone

        return find_zone(self.zone) if self.card is not None and self.card.naive_times else None

    def settle(self, name: str, value: Value, unit: str | None, field: str) -> tuple[Value, Known]:
        """Return the setting in the unit stored, and what would then be known of its parameter.

        Raises
        ------
        RecordError
            If kind or unit contradict what is known, or the name is an observable's.
        """
        known = self.parameters.get(name)
        if known is None:
            if name in self.observables or (self.card is not None and name in self.card.observables):
                wanted = f"another name: {name!r} is an observable of {self.name}"
                raise RecordError(field, "a parameter", wanted)
            known = self._fresh_parameter(name, value)
        if value.kind != known.kind:
            value = _reread(value, known.kind, field)
        if value.kind != "number":
            return value, known
        known = self._adopt(known, unit, field)
        stated = known.bare if unit is None else unit
        return _convert_value(value, stated, known.unit, field), known

    def settle_reading(
        self, name: str, read: ReadValue, unit: str | None, field: str, plan: Mapping[str, Known]
    ) -> tuple[ReadValue, Known]:
        """Return the reading in the unit stored, and what would then be known of its observable.

        All clouds of an observable have one unit; `plan` holds what the same record has said so far.

        Raises
        ------
        RecordError
            If the unit contradicts what is known, or the name is a parameter's.
        """
        known = self.observables.get(name)
        if known is None:
            if name in self.parameters or (self.card is not None and name in self.card.parameters):
                wanted = f"another name: {name!r} is a parameter of {self.name}"
                raise RecordError(field, "an observable", wanted)
            known = self._fresh_observable(name)
        if known.unit is None and (shared := self._unit_of_clouds(name, plan)) is not None:
            known = Known(known.kind, shared, shared, known.id)
        known = self._adopt(known, unit, field)
        stated = known.bare if unit is None else unit
        if stated in (None, known.unit) or known.unit is None:
            return read, known
        try:
            rule = conversion(parse_unit(stated or ""), known.unit)
            value = None if read.value is None else rule.value(read.value)
            stderr = None if read.stderr is None else rule.stderr(read.stderr)
        except UnitError as problem:
            raise RecordError(field, shorten(unit), str(problem)) from None
        return ReadValue(value, stderr, read.state), known

    def settle_sensor(self, name: str, unit: str | None, field: str) -> Known:
        """Return what is known of a sensor once a reading in this unit (None for a bare number) is taken.

        Raises
        ------
        RecordError
            If the unit contradicts what is known, or the name is that of a parameter or observable.
        """
        known = self.sensors.get(name)
        if known is None:
            for kind, other in (("parameters", "a parameter"), ("observables", "an observable")):
                if name in getattr(self, kind) or (
                    self.card is not None and name in getattr(self.card, kind)
                ):
                    wanted = f"another name: {name!r} is {other} of {self.name}"
                    raise RecordError(field, "a sensor", wanted)
            entry = self.card.sensors.get(name) if self.card else None
            stated = entry.unit if entry else None
            known = Known("reading", stated, stated)
        return self._adopt(known, unit, field)

    def _fresh_parameter(self, name: str, value: Value) -> Known:
        entry = self.card.parameters.get(name) if self.card else None
        if entry is None:
            return Known(value.kind, None, None)
        kind = entry.kind or ("number" if entry.unit is not None else value.kind)
        return Known(kind, entry.unit, entry.unit)

    def _fresh_observable(self, name: str) -> Known:
        entry = self.card.observable(name) if self.card else None
        unit = entry.unit if entry else None
        return Known("reading", unit, unit)

    def _unit_of_clouds(self, name: str, plan: Mapping[str, Known]) -> str | None:
        """Return the unit that other clouds of an observable have, or it has as a whole."""
        base = without_cloud(name)
        own = (known.unit for other, known in plan.items() if without_cloud(other) == base)
        return next((unit for unit in own if unit is not None), self.cloud_units.get(base))

    def _adopt(self, known: Known, unit: str | None, field: str) -> Known:
        """Take the first unit stated; refuse one that cannot be converted into it."""
        if unit is None or unit == known.unit:
            return known
        try:
            stated = parse_unit(unit)
            if known.unit is None:
                return Known(known.kind, stated, known.bare if known.bare is not None else stated, known.id)
            if not convertible(stated, known.unit):
                raise UnitError(f"a unit that converts to {known.unit or 'a pure number'}")
        except UnitError as problem:
            raise RecordError(f"{field}.unit", shorten(unit), str(problem)) from None
        return known


def _reread(value: Value, kind: str, field: str) -> Value:
    if kind == "truth" and value.kind == "text" and (value.exact or "").lower() in ("true", "false"):
        return Value("truth", 1.0 if (value.exact or "").lower() == "true" else 0.0, None)
    raise RecordError(
        field, f"{shorten(value.plain)} ({value.kind})", f"a {kind}, as stated before for this parameter"
    )


def _convert_value(value: Value, stated: str | None, target: str | None, field: str) -> Value:
    if stated is None or target is None or stated == target or value.num is None:
        return value
    try:
        return Value("number", conversion(parse_unit(stated), target).value(value.num) + 0.0, None)
    except UnitError as problem:
        raise RecordError(f"{field}.unit", shorten(stated), str(problem)) from None


class Names:
    """The names of every machine in the store, kept in memory by a writer."""

    def __init__(self) -> None:
        self.machines: dict[str, MachineNames] = {}
        self._loaded = False

    def forget(self) -> None:
        """Drop everything remembered."""
        self.machines.clear()
        self._loaded = False

    def load(self, connection: Connection) -> None:
        """Read everything once, if it is not in memory."""
        if self._loaded:
            return
        self.machines = read_names(connection)
        self._loaded = True

    def find(self, name: str) -> MachineNames:
        """Return a machine's names; those of an unknown machine have no id until they are entered."""
        return self.machines.get(name) or MachineNames(0, name)

    def enter(self, connection: Connection, machine: MachineNames) -> None:
        """Enter a machine that is not in the store yet."""
        if not machine.id:
            machine.id = insert_row(connection, tables.machine, {"name": machine.name, "zone": machine.zone})
            self.machines[machine.name] = machine

    def sequence(self, connection: Connection, machine: MachineNames, name: str) -> int:
        """Return the id of a sequence; an unknown one is entered."""
        if name not in machine.sequences:
            row = {"machine_id": machine.id, "name": name}
            machine.sequences[name] = insert_row(connection, tables.sequence, row)
        return machine.sequences[name]

    def version(
        self, connection: Connection, machine: MachineNames, sequence_id: int, structure: str, digest: bytes
    ) -> int:
        """Return the id of a version of a sequence; an unknown one is entered."""
        key = (sequence_id, digest)
        if key not in machine.versions:
            row = {"sequence_id": sequence_id, "digest": digest, "structure": structure}
            machine.versions[key] = insert_row(connection, tables.version, row)
        return machine.versions[key]

    def keep(self, connection: Connection, machine: MachineNames, plan: dict[str, Known]) -> None:
        """Enter new parameters and observables, and units adopted, of a record found good."""
        for name, known in plan.items():
            reading = known.kind == "reading"
            home = machine.observables if reading else machine.parameters
            table = tables.observable if reading else tables.parameter
            before = home.get(name)
            if before is None:
                row: dict[str, Any] = {"machine_id": machine.id, "name": name, "unit": known.unit}
                if not reading:
                    row["kind"] = known.kind
                home[name] = Known(known.kind, known.unit, known.bare, insert_row(connection, table, row))
            elif before.unit != known.unit:
                connection.execute(update(table).where(table.c.id == before.id).values(unit=known.unit))
                home[name] = Known(known.kind, known.unit, known.bare, before.id)
                machine.generation += 1
            if reading and known.unit is not None:
                self._share_unit(connection, machine, without_cloud(name), known.unit)

    def _share_unit(self, connection: Connection, machine: MachineNames, base: str, unit: str) -> None:
        """Give the unit of one cloud to those of the same observable that have none yet."""
        if base in machine.cloud_units:
            return
        machine.cloud_units[base] = unit
        for name, known in machine.observables.items():
            if known.unit is None and without_cloud(name) == base:
                own = tables.observable.c.id == known.id
                connection.execute(update(tables.observable).where(own).values(unit=unit))
                machine.observables[name] = Known(known.kind, unit, unit, known.id)


def read_names(connection: Connection) -> dict[str, MachineNames]:
    """Return everything known by name, machine by machine."""
    machines = {
        row.id: MachineNames(row.id, row.name, row.zone) for row in connection.execute(select(tables.machine))
    }
    for machine_id, toml in newest_cards(connection).items():
        machines[machine_id].card = stored_card(toml)
    for row in connection.execute(select(tables.parameter)):
        entry = _card_entry(machines[row.machine_id], "parameters", row.name)
        known = Known(row.kind, row.unit, entry if entry is not None else row.unit, row.id)
        machines[row.machine_id].parameters[row.name] = known
    for row in connection.execute(select(tables.observable)):
        entry = _card_entry(machines[row.machine_id], "observables", row.name)
        known = Known("reading", row.unit, entry if entry is not None else row.unit, row.id)
        machines[row.machine_id].observables[row.name] = known
        if row.unit is not None:
            machines[row.machine_id].cloud_units.setdefault(without_cloud(row.name), row.unit)
    for row in connection.execute(select(tables.sensor)):
        entry = _card_entry(machines[row.machine_id], "sensors", row.name)
        known = Known("reading", row.unit, entry if entry is not None else row.unit, row.id)
        machines[row.machine_id].sensors[row.name] = known
    of_sequence = {}
    for row in connection.execute(select(tables.sequence)):
        machines[row.machine_id].sequences[row.name] = row.id
        of_sequence[row.id] = machines[row.machine_id]
    for row in connection.execute(
        select(tables.version.c.id, tables.version.c.sequence_id, tables.version.c.digest)
    ):
        of_sequence[row.sequence_id].versions[row.sequence_id, bytes(row.digest)] = row.id
    return {machine.name: machine for machine in machines.values()}


def _card_entry(machine: MachineNames, kind: str, name: str) -> str | None:
    if machine.card is None:
        return None
    card = machine.card
    entry = card.observable(name) if kind == "observables" else getattr(card, kind).get(name)
    return entry.unit if entry else None


@lru_cache(maxsize=32)
def stored_card(toml: str) -> MachineCard:
    """Return a card from its text in the store; the same text is read once."""
    return parse_card(toml, source="the card in the store", checked=True)


def newest_cards(connection: Connection) -> dict[int, str]:
    """Return the text of the card in force of each machine, by machine id."""
    newest = select(tables.card.c.machine_id, func.max(tables.card.c.at_us).label("at_us"))
    newest = newest.group_by(tables.card.c.machine_id)
    chosen = newest.subquery()
    rows = select(tables.card.c.machine_id, tables.card.c.toml).join(
        chosen,
        (chosen.c.machine_id == tables.card.c.machine_id) & (chosen.c.at_us == tables.card.c.at_us),
    )
    return {row.machine_id: row.toml for row in connection.execute(rows)}


def cards_in_force(connection: Connection) -> dict[str, MachineCard]:
    """Return the card in force of each machine that has one, by the machine's name."""
    machines = {row.id: row.name for row in connection.execute(select(tables.machine))}
    return {machines[machine_id]: stored_card(toml) for machine_id, toml in newest_cards(connection).items()}


def keep_card(connection: Connection, names: Names, card: MachineCard, at_us: int) -> None:
    """Make a card the one in force; parameters, observables and sensors without a unit take the card's.

    Raises
    ------
    CardError
        If a unit of the card does not convert into the one stored, or a kind contradicts the one stored.
    """
    machine = names.find(card.machine)
    names.enter(connection, machine)
    for kind, stored, other in (
        ("parameters", machine.observables, "an observable"),
        ("observables", machine.parameters, "a parameter"),
        ("sensors", machine.parameters, "a parameter"),
        ("sensors", machine.observables, "an observable"),
    ):
        for name in getattr(card, kind).keys() & stored.keys():
            raise CardError(
                f"card of {card.machine}: {kind}.{name}: found an entry, wanted none: "
                f"the store has {other} of that name"
            )
    kinds = {"parameters": tables.parameter, "observables": tables.observable, "sensors": tables.sensor}
    for kind, table in kinds.items():
        for name, known in getattr(machine, kind).items():
            entry = card.observable(name) if kind == "observables" else getattr(card, kind).get(name)
            if entry is None:
                continue
            if entry.kind is not None and known.kind not in ("reading", entry.kind):
                raise CardError(
                    f"card of {card.machine}: {kind}.{name}.kind: found {entry.kind}, the store has {known.kind}"
                )
            if entry.unit is None:
                continue
            if known.unit is None:
                connection.execute(update(table).where(table.c.id == known.id).values(unit=entry.unit))
            elif entry.unit != known.unit:
                raise CardError(
                    f"card of {card.machine}: {kind}.{name}.unit: found {entry.unit!r}, wanted {known.unit!r}, "
                    "in which the store holds it: the meaning of bare numbers taken before must not change "
                    "(a record may state any unit that converts)"
                )
    connection.execute(update(tables.machine).where(tables.machine.c.id == machine.id).values(zone=card.zone))
    newest = select(func.max(tables.card.c.at_us)).where(tables.card.c.machine_id == machine.id)
    at_us = max(at_us, (connection.execute(newest).scalar() or 0) + 1)  # also after the clock was put back
    digest = card.digest
    same = (tables.card.c.machine_id == machine.id) & (tables.card.c.digest == digest)
    if connection.execute(select(tables.card.c.id).where(same)).first():
        connection.execute(update(tables.card).where(same).values(at_us=at_us))
    else:
        row = {"machine_id": machine.id, "digest": digest, "toml": card.toml, "at_us": at_us}
        connection.execute(insert(tables.card).values(**row))
    names.forget()


def insert_row(connection: Connection, table: Table, row: dict[str, Any]) -> int:
    """Insert one row and return its id (the caller is the only writer)."""
    key = connection.execute(insert(table).values(**row)).inserted_primary_key
    assert key is not None
    return int(key[0])
