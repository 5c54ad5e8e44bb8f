"""The machine cards that a store was given: which is in force, which were before, and whether one fits the store.

The cards of a machine that was merged into another stay in the history of that one, and are never in force.
"""

from __future__ import annotations

import difflib
from collections import defaultdict
from dataclasses import dataclass
from datetime import datetime
from functools import lru_cache
from typing import TYPE_CHECKING

from sqlalchemy import Connection, func, insert, select, update

from nightfold import tables
from nightfold.card import MachineCard, parse_card, settle_derived
from nightfold.errors import CardError
from nightfold.timestamps import from_us

if TYPE_CHECKING:
    from nightfold.formulas.definitions import Derived
    from nightfold.ledger.names import MachineNames, Names


@lru_cache(maxsize=32)
def stored_card(toml: str) -> MachineCard:
    """Return a card from its text in the store; the same text is read once."""
    return parse_card(toml, source="the card in the store", checked=True)


@lru_cache(maxsize=32)
def stored_derived(toml: str) -> dict[str, Derived]:
    """Return the derived quantities of a card in the store; the same text is read once."""
    card = stored_card(toml)
    return settle_derived(card) if card.derived else {}


def newest_cards(connection: Connection) -> dict[int, str]:
    """Return the text of the card in force of each machine, by machine id."""
    card, machine = tables.card, tables.machine
    given = select(card.c.id, card.c.machine_id).order_by(card.c.at_us.desc(), card.c.id.desc())
    ids = defaultdict[int, list[int]](list)
    for row in connection.execute(given):
        ids[row.machine_id].append(row.id)
    found: dict[int, str] = {}
    while ids:  # once, but for machines whose newest card is one of a machine that was merged into them
        newest = [own.pop(0) for own in ids.values()]
        query = select(card.c.machine_id, card.c.toml, machine.c.name).join(machine)
        for machine_id, toml, name in connection.execute(query.where(card.c.id.in_(newest))):
            if stored_card(toml).machine == name:
                found[machine_id] = toml
        for machine_id in [machine_id for machine_id, own in ids.items() if not own or machine_id in found]:
            del ids[machine_id]
    return found


def cards_in_force(connection: Connection) -> dict[str, MachineCard]:
    """Return the card in force of each machine that has one, by the machine's name."""
    machines = {row.id: row.name for row in connection.execute(select(tables.machine))}
    return {machines[machine_id]: stored_card(toml) for machine_id, toml in newest_cards(connection).items()}


@dataclass(frozen=True, slots=True)
class CardUsed:
    """A card that a store was given.

    Attributes
    ----------
    at : datetime
        When it came into force, UTC.
    in_force : bool
        Whether it is now.
    toml : str
        The card as it was given.
    changes : tuple of str
        Its lines that differ from the card before, with ``-`` and ``+``; empty for the first.
    """

    at: datetime
    in_force: bool
    toml: str
    changes: tuple[str, ...]


def cards_used(connection: Connection, machine_id: int) -> list[CardUsed]:
    """Return the cards of a machine, the oldest first."""
    card = tables.card
    rows = connection.execute(
        select(card).where(card.c.machine_id == machine_id).order_by(card.c.at_us, card.c.id)
    ).all()
    now = newest_cards(connection).get(machine_id)
    current = max((place for place, row in enumerate(rows) if row.toml == now), default=None)
    texts = [None, *(row.toml for row in rows)]
    return [
        CardUsed(from_us(row.at_us), place == current, row.toml, _changes(*texts[place : place + 2]))
        for place, row in enumerate(rows)
    ]


def _changes(old: str | None, new: str | None) -> tuple[str, ...]:
    if old is None or new is None:
        return ()
    lines = difflib.unified_diff(old.splitlines(), new.splitlines(), lineterm="", n=0)
    return tuple(line for line in list(lines)[2:] if not line.startswith("@@"))


def keep_card(connection: Connection, names: Names, card: MachineCard, at_us: int) -> None:
    """Make a card the one in force; parameters, observables and sensors without a unit take the card's.

    Raises
    ------
    CardError
        If it contradicts the store; the message says all that does. Nothing is written then.
    """
    machine = names.find(card.machine)
    if machine.name != card.machine:
        raise CardError(
            f"card of {card.machine}: machine: found {card.machine!r}, wanted {machine.name!r}: "
            "the first is only another name of it since the two were merged"
        )
    from nightfold.ledger.deriving import derived_contradictions, keep_derived, release_derived

    wrong = release_derived(connection, machine, card)
    wrong += [*contradictions(machine, card), *derived_contradictions(connection, machine, card)]
    wrong += _moved_times(connection, machine, card)
    if wrong:
        raise CardError("\n".join(f"card of {card.machine}: {reason}" for reason in wrong))
    names.enter(connection, machine)
    for kind, table in _TABLES.items():
        for name, known in getattr(machine, kind).items():
            unit = _unit(card, kind, name)
            if unit is not None and known.unit is None:
                connection.execute(update(table).where(table.c.id == known.id).values(unit=unit))
    own = tables.card.c.machine_id == machine.id
    connection.execute(update(tables.machine).where(tables.machine.c.id == machine.id).values(zone=card.zone))
    if newest_cards(connection).get(machine.id) != card.toml:
        newest = connection.execute(select(func.max(tables.card.c.at_us)).where(own)).scalar() or 0
        at_us = max(at_us, newest + 1)  # also after the clock was put back
        row = {"machine_id": machine.id, "digest": card.digest, "toml": card.toml, "at_us": at_us}
        connection.execute(insert(tables.card).values(**row))
    keep_derived(connection, machine, card, at_us)
    names.forget()


_TABLES = {"parameters": tables.parameter, "observables": tables.observable, "sensors": tables.sensor}


def contradictions(machine: MachineNames, card: MachineCard) -> list[str]:
    """Return all in which a card contradicts what the store has of a machine."""
    found = []
    for kind, stored, other in (
        ("parameters", machine.observables, "an observable"),
        ("observables", machine.parameters, "a parameter"),
        ("sensors", machine.parameters, "a parameter"),
        ("sensors", machine.observables, "an observable"),
    ):
        found += [
            f"{kind}.{name}: found an entry, wanted none: the store has {other} of that name"
            for name in sorted(getattr(card, kind).keys() & stored.keys())
        ]
    for kind in _TABLES:
        for name, known in getattr(machine, kind).items():
            entry = card.observable(name) if kind == "observables" else getattr(card, kind).get(name)
            if entry is None:
                continue
            if entry.kind is not None and known.kind not in ("reading", entry.kind):
                found.append(f"{kind}.{name}.kind: found {entry.kind}, the store has {known.kind}")
            elif None not in (entry.unit, known.unit) and entry.unit != known.unit:
                found.append(
                    f"{kind}.{name}.unit: found {entry.unit!r}, wanted {known.unit!r}, "
                    "in which the store holds it: the meaning of bare numbers taken before must not change "
                    "(a record may state any unit that converts)"
                )
    return found


def _moved_times(connection: Connection, machine: MachineNames, card: MachineCard) -> list[str]:
    """Return the reason against a card that reads times without an offset in another zone than one before it did."""
    if not card.naive_times or not _has_times(connection, machine.id):
        return []
    zone = last_naive_zone(connection, machine) or card.zone
    if zone == card.zone:
        return []
    return [
        f"zone: found {card.zone!r} with naive_times = true, wanted {zone!r}, in which times without an offset were "
        "read before: taken again they would be other shots (without naive_times the zone may be another one; "
        "times then need an offset)"
    ]


def last_naive_zone(connection: Connection, machine: MachineNames) -> str | None:
    """Return the zone in which times without an offset were read last, by any card of a machine; None if never."""
    given = tables.card
    texts = connection.execute(
        select(given.c.toml)
        .where(given.c.machine_id == machine.id)
        .order_by(given.c.at_us.desc(), given.c.id.desc())
    ).scalars()
    before = (stored_card(toml) for toml in texts)
    naive = (old for old in before if old.naive_times and old.machine == machine.name)
    return next((old.zone for old in naive), None)


def _has_times(connection: Connection, machine_id: int) -> bool:
    """Return whether a machine has shots, or readings of sensors."""
    shot = select(tables.shot.c.id).join(tables.sequence).where(tables.sequence.c.machine_id == machine_id)
    sensor = select(tables.sensor.c.id).where(tables.sensor.c.machine_id == machine_id)
    return any(connection.execute(query.limit(1)).first() is not None for query in (shot, sensor))


def _unit(card: MachineCard, kind: str, name: str) -> str | None:
    entry = card.observable(name) if kind == "observables" else getattr(card, kind).get(name)
    return entry.unit if entry else None
