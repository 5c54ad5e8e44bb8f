"""The derived quantities of the cards in force: what they are made of, and the versions of their expressions.

Nothing but the expression is stored. A derived quantity has a row among the parameters or observables, so that scans and
fits can refer to it, and never a value; each expression that a card in force stated is a row of `derivation`.
"""

from __future__ import annotations

import json
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Table, delete, exists, insert, select, update

from nightfold import tables
from nightfold.card import MachineCard, settle_derived
from nightfold.errors import CardError, ChoiceNeeded
from nightfold.ledger.columns import MadeOf, Named
from nightfold.ledger.names import MachineNames, insert_row, newest_cards, stored_card
from nightfold.timestamps import from_us

if TYPE_CHECKING:
    from nightfold.formulas.definitions import Derived

_BY_CARD = "card"
_TABLES = {"parameter": tables.parameter, "observable": tables.observable}


@dataclass(frozen=True, slots=True)
class Derivation:
    """One version of a derived quantity; `since` is when a card first stated it."""

    machine: str
    name: str
    version: str
    expression: str
    unit: str
    since: datetime


@lru_cache(maxsize=32)
def _settled(toml: str) -> dict[str, Derived]:
    card = stored_card(toml)
    return settle_derived(card) if card.derived else {}


def derived_quantities(connection: Connection) -> dict[int, dict[str, Derived]]:
    """Return the derived quantities of the card in force, by machine id and name."""
    return {machine_id: _settled(toml) for machine_id, toml in newest_cards(connection).items()}


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


def keep_derived(connection: Connection, machine: MachineNames, card: MachineCard, at_us: int) -> None:
    """Enter the derived quantities of a card, each with its version, and let go of those it has no longer.

    Raises
    ------
    CardError
        If a name is that of something recorded, or a scan is swept along a quantity that is gone.
    """
    before = set(machine.card.derived) if machine.card is not None else set()
    for name in sorted(before - set(card.derived)):
        _let_go(connection, machine, name)
    versions = _versions_of(connection, machine.name)
    for name, derived in settle_derived(card).items() if card.derived else ():
        _check_name(connection, machine, derived, was_derived=name in versions, in_force=name in before)
        home = machine.parameters if derived.role == "parameter" else machine.observables
        table = _TABLES[derived.role]
        if name in home:
            own = table.c.id == home[name].id
            connection.execute(update(table).where(own).values(unit=derived.unit))
        else:
            row: dict[str, Any] = {"machine_id": machine.id, "name": name, "unit": derived.unit}
            insert_row(connection, table, row | ({"kind": "number"} if derived.role == "parameter" else {}))
        _enter_version(connection, machine.name, card, derived, versions.get(name, []), at_us)


def _let_go(connection: Connection, machine: MachineNames, name: str) -> None:
    """Remove the row of a quantity that the card has no longer, unless kept fits refer to it."""
    place = f"card of {machine.name}: derived.{name}"
    if (known := machine.parameters.get(name)) is not None:
        axis, swept = tables.scan_axis, tables.swept_derived
        in_use = [
            select(axis.c.scan_id).where(axis.c.parameter_id == known.id),
            select(swept.c.shot_id).where(swept.c.parameter_id == known.id),
        ]
        if any(connection.execute(query.limit(1)).first() for query in in_use):
            wanted = "an entry: the store has scans along it (its expression may change)"
            raise CardError(f"{place}: found nothing, wanted {wanted}")
        connection.execute(delete(tables.parameter).where(tables.parameter.c.id == known.id))
        del machine.parameters[name]
    elif (known := machine.observables.get(name)) is not None:
        fit = tables.fit
        if not connection.execute(select(fit.c.id).where(fit.c.observable_id == known.id).limit(1)).first():
            connection.execute(delete(tables.observable).where(tables.observable.c.id == known.id))
            del machine.observables[name]


def _check_name(
    connection: Connection, machine: MachineNames, derived: Derived, *, was_derived: bool, in_force: bool
) -> None:
    """Refuse to derive what has been recorded, or what was derived as the other kind of quantity."""
    name, place = derived.name, f"card of {machine.name}: derived.{derived.name}"
    roles = {"parameter": machine.parameters, "observable": machine.observables}
    taken = next((role for role, home in roles.items() if name in home), None)
    if name in machine.sensors:
        raise CardError(f"{place}: found an entry, wanted another name: the store has a sensor of that name")
    if taken is None or (in_force and taken == derived.role):
        return
    article = "a parameter" if taken == "parameter" else "an observable"
    if not was_derived or _has_values(connection, taken, roles[taken][name].id):
        raise CardError(
            f"{place}: found an entry, wanted another name: the store has {article} of that name, as recorded"
        )
    if taken != derived.role:
        wanted = f"one that makes it {article} as before, or another name"
        raise CardError(f"{place}.expression: found one that makes it the other kind of quantity, wanted {wanted}")


def _has_values(connection: Connection, role: str, number: int | None) -> bool:
    homes = {
        "parameter": (tables.set_value.c.parameter_id, tables.shot_value.c.parameter_id),
        "observable": (tables.reading.c.observable_id, tables.past_reading.c.observable_id),
    }
    return any(
        connection.execute(select(exists().where(column == number))).scalar() for column in homes[role]
    )


def _enter_version(
    connection: Connection,
    machine: str,
    card: MachineCard,
    derived: Derived,
    earlier: Sequence[Derivation],
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


def _versions_of(connection: Connection, machine: str) -> dict[str, list[Derivation]]:
    """Return every version of each derived quantity of a machine, the oldest first."""
    table = tables.derivation
    found: dict[str, list[Derivation]] = {}
    query = select(table).where(table.c.settings.startswith(f'{{"by": "{_BY_CARD}", "machine": ', autoescape=True))
    for row in connection.execute(query.order_by(table.c.id)):
        said = json.loads(row.settings)
        if said["machine"] == machine:
            since = datetime.fromisoformat(said["since"])
            item = Derivation(machine, row.name, row.version, said["expression"], said["unit"], since)
            found.setdefault(row.name, []).append(item)
    return found


def versions_in_use(connection: Connection, machine: str, names: Collection[str]) -> dict[str, str]:
    """Return the version in force of the derived among some names, and of those that they are made of."""
    numbers = {row.name: row.id for row in connection.execute(select(tables.machine))}
    settled = derived_quantities(connection).get(numbers[machine], {})
    wanted = {other for name in names if name in settled for other in settled[name].formulas}
    if not wanted:
        return {}
    known = list_derivations(connection, machine)
    return {item.name: item.version for item, _, in_force in known if in_force and item.name in wanted}


def list_derivations(connection: Connection, machine: str) -> list[tuple[Derivation, str, bool]]:
    """Return each version of every derived quantity of a machine, its role, and whether it is in force."""
    numbers = {row.name: row.id for row in connection.execute(select(tables.machine))}
    toml = newest_cards(connection).get(numbers[machine])
    card = stored_card(toml) if toml is not None else None
    settled: Mapping[str, Derived] = _settled(toml) if toml is not None else {}
    found = []
    for name, versions in sorted(_versions_of(connection, machine).items()):
        for item in versions:
            own = settled.get(name)
            stated = card.derived[name].expression if card is not None and own is not None else None
            in_force = own is not None and (item.expression, item.unit) == (stated, own.unit)
            found.append((item, own.role if own is not None else "", in_force))
    return found
