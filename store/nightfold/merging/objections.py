"""What speaks against merging two machines: found before anything is changed, and all of it said at once."""

from __future__ import annotations

from collections.abc import Iterator

from sqlalchemy import Connection, func, select

from nightfold import tables
from nightfold.ledger.cards import contradictions, last_naive_zone
from nightfold.ledger.deriving import derived_contradictions
from nightfold.ledger.names import Known, MachineNames
from nightfold.ledger.rows import chunks
from nightfold.sensors.keeping import contradicted, load_hours

KINDS = ("parameters", "observables", "sensors")
_WORDS = {"parameters": "a parameter", "observables": "an observable", "sensors": "a sensor"}


def find_objections(connection: Connection, old: MachineNames, into: MachineNames) -> list[str]:
    """Return every reason why the first machine cannot be merged into the second."""
    found = [*_names(old, into), *_card(connection, old, into), *_sensors(connection, old, into)]
    if into.card is not None:
        said = contradictions(old, into.card) + derived_contradictions(connection, old, into.card)
        found += [
            f"card of {into.name}, which {old.name} would come under: {reason}"
            for reason in said
            if not any(reason.split(":")[0].rpartition(".")[0] == known.split(":")[0] for known in found)
        ]
    return found


def _names(old: MachineNames, into: MachineNames) -> Iterator[str]:
    for kind in KINDS:
        ours, theirs = getattr(old, kind), getattr(into, kind)
        for name in sorted(ours.keys() & theirs.keys()):
            yield from _differences(f"{kind}.{name}", old, into, ours[name], theirs[name])
        for other in KINDS:
            if other != kind:
                for name in sorted(ours.keys() & getattr(into, other).keys()):
                    wanted = f"another name: {into.name} has {_WORDS[other]} of that name"
                    yield f"{kind}.{name}: found {_WORDS[kind]} of {old.name}, wanted {wanted}"
    for base in sorted(old.cloud_units.keys() & into.cloud_units.keys()):
        units = old.cloud_units[base], into.cloud_units[base]
        if units[0] != units[1] and not old.observables.keys() & into.observables.keys() & {base}:
            yield f"observables.{base}: clouds of {old.name} are in {units[0]!r}, those of {into.name} in {units[1]!r}"


def _differences(
    field: str, old: MachineNames, into: MachineNames, ours: Known, theirs: Known
) -> Iterator[str]:
    if ours.kind != theirs.kind:
        yield f"{field}: found a {ours.kind} at {old.name}, wanted a {theirs.kind} as at {into.name}"
    elif None not in (ours.unit, theirs.unit) and ours.unit != theirs.unit:
        yield f"{field}: found {ours.unit!r} at {old.name}, wanted {theirs.unit!r} as at {into.name}"


def _card(connection: Connection, old: MachineNames, into: MachineNames) -> Iterator[str]:
    """Yield what would be lost with the card of the machine that goes."""
    if old.card is None:
        return
    if into.card is None:
        yield (
            f"card: {old.name} has one, wanted one of {into.name} too (it is then the one in force); "
            "use one first: nightfold take --card, or Store.use_card"
        )
        return
    zone = last_naive_zone(connection, old)
    lost = old.card.naive_times and not into.card.naive_times
    if zone is not None and (lost or (into.card.naive_times and zone != into.zone)):
        yield (
            f"card: times without offset are local times of {zone} at {old.name}, wanted the same at {into.name}, "
            "or files taken already would be other shots when they are taken again"
        )


def _sensors(connection: Connection, old: MachineNames, into: MachineNames) -> Iterator[str]:
    """Yield sensors of both names that say different things of one moment."""
    hour = tables.sensor_hour
    for name in sorted(old.sensors.keys() & into.sensors.keys()):
        ids = old.sensors[name].id or 0, into.sensors[name].id or 0
        shared = (
            select(hour.c.hour)
            .where(hour.c.sensor_id.in_(ids))
            .group_by(hour.c.hour)
            .having(func.count() == len(ids))
        )
        differing = 0
        for part in chunks(sorted(connection.execute(shared).scalars())):
            ours, theirs = (load_hours(connection, sensor_id, part) for sensor_id in ids)
            differing += sum(int(contradicted(theirs[key], ours[key])[1].sum()) for key in part)
        if differing:
            found = f"{differing} readings that differ from those of {into.name} at the same time"
            yield f"sensors.{name}: found {found}, wanted none"
