"""The derived quantities of the cards in force: what they are made of, and the versions of their expressions.

Nothing but the expression is stored. A derived quantity has a row among the parameters or observables, so that scans
and fits can refer to it, and never a value; each expression that a card in force stated is a row of `derivation`.
"""

from __future__ import annotations

import json
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import ColumnElement, Connection, Row, Select, Table, delete, exists, insert, select, update

from nightfold import tables
from nightfold.card import MachineCard, settle_derived
from nightfold.errors import ChoiceNeeded
from nightfold.ledger.cards import newest_cards, stored_card, stored_derived
from nightfold.ledger.columns import MadeOf, Named, setting_columns
from nightfold.timestamps import from_us

if TYPE_CHECKING:
    from nightfold.formulas.definitions import Derived
    from nightfold.ledger.names import MachineNames

_BY_CARD = "card"
_TABLES = {"parameter": tables.parameter, "observable": tables.observable}


@dataclass(frozen=True, slots=True)
class Version:
    """One expression of a derived quantity.

    Attributes
    ----------
    machine, name, version, expression, unit : str
    since : datetime
        When a card first stated it.
    of : {'parameter', 'observable'} or None
        None where the card has it no longer.
    in_force : bool
        Whether it is the one of the card in force.
    """

    machine: str
    name: str
    version: str
    expression: str
    unit: str
    since: datetime
    of: str | None = None
    in_force: bool = False


def derived_quantities(connection: Connection) -> dict[int, dict[str, Derived]]:
    """Return the derived quantities of the card in force, by machine id and name."""
    return {machine_id: stored_derived(toml) for machine_id, toml in newest_cards(connection).items()}


class Makings:
    """What the derived among some names are made of; one look at the cards serves all of them."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._derived = derived_quantities(connection)

    def of(self, name: str, machine_ids: Sequence[int]) -> MadeOf | None:
        """Return what a name is made of, None for a recorded one.

        Raises
        ------
        ChoiceNeeded
            If the machines do not derive it alike.
        """
        found = [self._derived.get(machine_id, {}).get(name) for machine_id in machine_ids]
        first = found[0] if found else None
        if any(other != first for other in found):
            raise ChoiceNeeded(f"{name!r}: the machines do not derive it alike; name the machine")
        if first is None:
            return None
        settings, readings = (
            _named(self._connection, table, names, machine_ids)
            for table, names in ((tables.parameter, first.parameters), (tables.observable, first.observables))
        )
        return MadeOf(first, settings, readings)

    def quantities(self, machine_id: int) -> Mapping[str, Derived]:
        """Return the derived quantities of a machine."""
        return self._derived.get(machine_id, {})

    def expressions(self, machine_id: int) -> dict[str, str]:
        """Return the expressions of a machine's derived quantities."""
        card = stored_card(newest_cards(self._connection)[machine_id])
        return {name: entry.expression for name, entry in card.derived.items()}

    def named(self, role: str, machine_id: int, names: Iterable[str]) -> list[Named]:
        """Return derived quantities of one machine by name."""
        found = []
        for item in _named(self._connection, _TABLES[role], list(names), [machine_id]):
            made_of = self.of(item.name, [machine_id])
            assert made_of is not None, item.name
            found.append(Named(item.name, item.ids, "number", made_of.derived.unit, made_of))
        return found


def _named(
    connection: Connection, table: Table, names: Sequence[str], machine_ids: Sequence[int]
) -> tuple[Named, ...]:
    query = select(table).where(table.c.machine_id.in_(machine_ids), table.c.name.in_(names))
    rows = list(connection.execute(query)) if names else []
    return tuple(
        Named(name, tuple(own.id for own in rows if own.name == name), "number", "") for name in names
    )


def declared_names(connection: Connection, shot_id: int) -> set[str]:
    """Return the derived parameters that a shot declares as swept."""
    table, parameter = tables.swept_derived, tables.parameter
    query = select(parameter.c.name).join(table, table.c.parameter_id == parameter.c.id)
    return set(connection.execute(query.where(table.c.shot_id == shot_id)).scalars())


def swept_inputs(connection: Connection, sequence_id: int) -> dict[int, frozenset[int]]:
    """Return the parameters that were swept because shots of a sequence declare a derived one as swept, by shot.

    They are those of which it is made that took several values within the scan.
    """
    table, shot, parameter = tables.swept_derived, tables.shot, tables.parameter
    query: Select[Any] = (
        select(shot.c.id, shot.c.set_id, shot.c.scan_id, parameter.c.name, parameter.c.machine_id)
        .join(table, table.c.shot_id == shot.c.id)
        .join(parameter, parameter.c.id == table.c.parameter_id)
        .where(shot.c.sequence_id == sequence_id)
    )
    by_sweep: dict[tuple[int | None, str, int], list[Row[Any]]] = {}
    for row in connection.execute(query):
        by_sweep.setdefault((row.scan_id, row.name, row.machine_id), []).append(row)
    makings = Makings(connection) if by_sweep else None
    found: dict[int, frozenset[int]] = {}
    for (_, name, machine_id), rows in by_sweep.items():
        made_of = makings.of(name, [machine_id]) if makings is not None else None
        inputs = made_of.settings if made_of is not None else ()
        columns = setting_columns(connection, rows, inputs, None)
        moved = {
            number for item in inputs if len(set(columns[item.name].tolist())) > 1 for number in item.ids
        }
        for row in rows:
            found[row.id] = found.get(row.id, frozenset()) | moved
    return found


def release_derived(connection: Connection, machine: MachineNames, card: MachineCard) -> list[str]:
    """Remove the derived quantities that a card has no longer, and return what speaks against it.

    Those that kept fits refer to keep their row.
    """
    before = machine.card.derived if machine.card is not None else {}
    wrong = []
    for name in sorted(before.keys() - card.derived.keys()):
        if (known := machine.parameters.get(name)) is not None:
            axis, swept = tables.scan_axis.c.parameter_id, tables.swept_derived.c.parameter_id
            if any(_occurs(connection, column, known.id) for column in (axis, swept)):
                wanted = (
                    "an entry: the store has scans along it; put it back into the card (its expression may change; "
                    "'nightfold card' shows the one in force)"
                )
                wrong.append(f"derived.{name}: found nothing, wanted {wanted}")
                continue
            connection.execute(delete(tables.parameter).where(tables.parameter.c.id == known.id))
            del machine.parameters[name]
        elif name in machine.observables:
            number = machine.observables[name].id
            if not _occurs(connection, tables.fit.c.observable_id, number):
                connection.execute(delete(tables.observable).where(tables.observable.c.id == number))
                del machine.observables[name]
    return wrong


def derived_contradictions(connection: Connection, machine: MachineNames, card: MachineCard) -> list[str]:
    """Return all in which the derived quantities of a card contradict what the store has of a machine."""
    if not card.derived:
        return []
    versions = _versions_of(connection, machine.name)
    before = machine.card.derived if machine.card is not None else {}
    found = []
    for name, derived in settle_derived(card).items():
        taken = next((role for role in _TABLES if name in _home(machine, role)), None)
        if taken is None or (name in before and taken == derived.role):
            continue
        article = "a parameter" if taken == "parameter" else "an observable"
        if name not in versions or _has_values(connection, taken, _home(machine, taken)[name].id):
            found.append(
                f"derived.{name}: found an entry, wanted another name: the store has {article} of that name"
            )
        elif taken != derived.role:
            wanted = f"one that makes it {article} as before, or another name"
            found.append(f"derived.{name}.expression: found the other kind of quantity, wanted {wanted}")
    found += [
        f"derived.{name}: found an entry, wanted another name: the store has a sensor of that name"
        for name in sorted(card.derived.keys() & machine.sensors.keys())
    ]
    return found


def keep_derived(connection: Connection, machine: MachineNames, card: MachineCard, at_us: int) -> None:
    """Enter the derived quantities of a card, each with the version of its expression."""
    versions = _versions_of(connection, machine.name) if card.derived else {}
    for name, derived in settle_derived(card).items() if card.derived else ():
        table, known = _TABLES[derived.role], _home(machine, derived.role).get(name)
        if known is not None:
            connection.execute(update(table).where(table.c.id == known.id).values(unit=derived.unit))
        else:
            row: dict[str, Any] = {"machine_id": machine.id, "name": name, "unit": derived.unit}
            kind = {"kind": "number"} if derived.role == "parameter" else {}
            connection.execute(insert(table).values(**row, **kind))
        _enter_version(connection, machine.name, card, derived, versions.get(name, []), at_us)


def _home(machine: MachineNames, role: str) -> dict[str, Any]:
    return machine.parameters if role == "parameter" else machine.observables


def _occurs(connection: Connection, column: ColumnElement[Any], number: int | None) -> bool:
    return bool(connection.execute(select(exists().where(column == number))).scalar())


def _has_values(connection: Connection, role: str, number: int | None) -> bool:
    homes = {
        "parameter": (tables.set_value.c.parameter_id, tables.shot_value.c.parameter_id),
        "observable": (tables.reading.c.observable_id, tables.past_reading.c.observable_id),
    }
    return any(_occurs(connection, column, number) for column in homes[role])


def _enter_version(
    connection: Connection,
    machine: str,
    card: MachineCard,
    derived: Derived,
    earlier: Sequence[Version],
    at_us: int,
) -> None:
    expression = card.derived[derived.name].expression
    if any((item.expression, item.unit) == (expression, derived.unit) for item in earlier):
        return
    settings = {
        "by": _BY_CARD,
        "machine": machine,
        "expression": expression,
        "unit": derived.unit,
        "since": from_us(at_us).isoformat(),
    }
    version = str(max((int(item.version) for item in earlier), default=0) + 1)
    row = {"name": derived.name, "version": version, "settings": json.dumps(settings, ensure_ascii=False)}
    connection.execute(insert(tables.derivation).values(**row))


def _versions_of(connection: Connection, machine: str) -> dict[str, list[Version]]:
    """Return every version of each derived quantity of a machine, the oldest first."""
    found: dict[str, list[Version]] = {}
    for row, said in version_rows(connection, machine):
        since = datetime.fromisoformat(said["since"])
        item = Version(machine, row.name, row.version, said["expression"], said["unit"], since)
        found.setdefault(row.name, []).append(item)
    return found


def version_rows(connection: Connection, machine: str) -> Iterator[tuple[Row[Any], dict[str, str]]]:
    """Yield the rows of the expressions that the cards of a machine stated, and what each says, the oldest first."""
    table = tables.derivation
    query = select(table).where(
        table.c.settings.startswith(f'{{"by": "{_BY_CARD}", "machine": ', autoescape=True)
    )
    for row in connection.execute(query.order_by(table.c.id)):
        said = json.loads(row.settings)
        if said["machine"] == machine:
            yield row, said


def versions_in_use(connection: Connection, machine: str, names: Collection[str]) -> dict[str, str]:
    """Return the version in force of the derived among some names, and of those that they are made of."""
    numbers = {row.name: row.id for row in connection.execute(select(tables.machine))}
    settled = derived_quantities(connection).get(numbers[machine], {})
    wanted = {other for name in names if name in settled for other in settled[name].formulas}
    if not wanted:
        return {}
    known = list_versions(connection, machine)
    return {item.name: item.version for item in known if item.in_force and item.name in wanted}


def list_versions(connection: Connection, machine: str) -> list[Version]:
    """Return every expression that the derived quantities of a machine had, by name, the oldest first."""
    machine_id = connection.execute(
        select(tables.machine.c.id).where(tables.machine.c.name == machine)
    ).scalar()
    toml = newest_cards(connection).get(machine_id) if machine_id is not None else None
    stated = stored_card(toml).derived if toml is not None else {}
    settled = stored_derived(toml) if toml is not None else {}
    found: list[Version] = []
    for name, versions in sorted(_versions_of(connection, machine).items()):
        own = settled.get(name)
        now = (stated[name].expression, own.unit) if own is not None else None
        of = own.role if own is not None else None
        found += [replace(item, of=of, in_force=(item.expression, item.unit) == now) for item in versions]
    return found
