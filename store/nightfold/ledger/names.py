"""What the store knows by name: machines, their parameters and observables with kind and unit, sequences.

A writer keeps this in memory. It is read again whenever another writer has changed the store, and forgotten after a
rollback (SQLite gives the same ids out again). Nothing here is written before a whole record has been found good.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

from sqlalchemy import Connection, Table, insert, select, update

from nightfold import tables
from nightfold.card import MachineCard, without_cloud
from nightfold.errors import RecordError, UnitError
from nightfold.ledger.cards import newest_cards, stored_card, stored_derived
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
    merged: list[str] = field(default_factory=list)
    """Other names of it: machines that were merged into it."""
    generation: int = 0

    @property
    def naive_zone(self) -> ZoneInfo | None:
        """The zone in which times without an offset are read; None where the card does not opt in."""
        return self.card.naive_zone if self.card is not None else None

    @property
    def roles(self) -> dict[str, Literal["parameter", "observable"]]:
        """What each name is, for the columns of a table."""
        return {
            **dict.fromkeys(self.parameters, "parameter"),
            **dict.fromkeys(self.observables, "observable"),
        }

    def settings_behind(self, name: str) -> tuple[str, ...] | None:
        """Return the parameters of which the card derives another one; None for what it does not derive."""
        if self.card is None or name not in self.card.derived:
            return None
        derived = stored_derived(self.card.toml)[name]
        return derived.parameters if derived.role == "parameter" else None

    def settle(self, name: str, value: Value, unit: str | None, field: str) -> tuple[Value, Known]:
        """Return the setting in the unit stored, and what would then be known of its parameter.

        Raises
        ------
        RecordError
            If kind or unit contradict what is known, or the name is an observable's or that of a derived quantity.
        """
        if self.card is not None and name in self.card.derived:
            raise self._derived_already(name, field)
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
            If the unit contradicts what is known, or the name is a parameter's or that of a derived quantity.
        """
        if self.card is not None and name in self.card.derived:
            raise self._derived_already(name, field)
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

    def _derived_already(self, name: str, field: str) -> RecordError:
        """Return the error for a value stated of what the card derives."""
        assert self.card is not None
        expression = shorten(self.card.derived[name].expression)
        wanted = f"none: the card of {self.name} derives {name} by {expression}; leave it out or give it another name"
        return RecordError(field, "a value", wanted)

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
        for other, known in plan.items():
            if known.kind == "reading" and known.unit is not None and without_cloud(other) == base:
                return known.unit
        return self.cloud_units.get(base)

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
        self._aliases: dict[str, str] = {}
        self._loaded = False

    def forget(self) -> None:
        """Drop everything remembered."""
        self.machines.clear()
        self._aliases.clear()
        self._loaded = False

    def load(self, connection: Connection) -> None:
        """Read everything once, if it is not in memory."""
        if self._loaded:
            return
        self.machines = read_names(connection)
        self._aliases = read_aliases(connection)
        self._loaded = True

    def find(self, name: str) -> MachineNames:
        """Return a machine's names, by its own name or another one of it; an unknown one has no id until entered."""
        return self.machines.get(self._aliases.get(name, name)) or MachineNames(0, name)

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


def read_aliases(connection: Connection) -> dict[str, str]:
    """Return the names that mean another machine since they were merged into it, and which."""
    alias, machine = tables.machine_alias, tables.machine
    query = select(alias.c.name, machine.c.name.label("means")).join(machine)
    return {row.name: row.means for row in connection.execute(query)}


def read_names(connection: Connection) -> dict[str, MachineNames]:
    """Return everything known by name, machine by machine."""
    machines = {
        row.id: MachineNames(row.id, row.name, row.zone) for row in connection.execute(select(tables.machine))
    }
    for machine_id, toml in newest_cards(connection).items():
        machines[machine_id].card = stored_card(toml)
    for alias in connection.execute(select(tables.machine_alias)):
        machines[alias.machine_id].merged.append(alias.name)
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


def insert_row(connection: Connection, table: Table, row: dict[str, Any]) -> int:
    """Insert one row and return its id (the caller is the only writer)."""
    key = connection.execute(insert(table).values(**row)).inserted_primary_key
    assert key is not None
    return int(key[0])
