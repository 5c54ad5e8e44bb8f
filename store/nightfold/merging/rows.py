"""Pointing rows that refer to one thing to another, in whatever table they stand."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy import Column, Connection, Table, bindparam, case, delete, select, union, update

from nightfold import tables
from nightfold.ledger.rows import chunks
from nightfold.settings import digest_of_sum, hash_setting

_PART = 200


def referring(target: Table) -> list[Column[Any]]:
    """Return every column that refers to a table by its id."""
    return [
        column
        for table in tables.metadata.sorted_tables
        for column in table.columns
        if column.references(target.c.id)
    ]


def point_to(connection: Connection, target: Table, ids: Mapping[int, int]) -> None:
    """Make everything that refers to the old ids refer to the new ones, and delete the old rows."""
    if not ids:
        return
    for part in chunks(sorted(ids), _PART):
        mapping = {old: ids[old] for old in part}
        for column in referring(target):
            moved = case(mapping, value=column, else_=column)
            connection.execute(update(column.table).where(column.in_(part)).values({column.name: moved}))
        connection.execute(delete(target).where(target.c.id.in_(part)))


def own_sets(connection: Connection, machine_id: int) -> list[int]:
    """Return the value sets of a machine, also those that no shot points to any more."""
    shot, sequence, rest, parameter = tables.shot, tables.sequence, tables.set_value, tables.parameter
    of_shots = select(shot.c.set_id).join(sequence, sequence.c.id == shot.c.sequence_id)
    of_names = select(rest.c.set_id).join(parameter, parameter.c.id == rest.c.parameter_id)
    both = union(
        of_shots.where(sequence.c.machine_id == machine_id),
        of_names.where(parameter.c.machine_id == machine_id),
    )
    return sorted(connection.execute(both).scalars())


def rename_sets(connection: Connection, set_ids: Sequence[int], old: str, into: str) -> int:
    """Give value sets the digests that they have under another machine's name; return how many were there already.

    The digest of a set is a sum of hashes, one of which is that of the machine's name. A set that is there already is
    the one that shots point to from now on; the other goes.
    """
    table, content, shot = tables.value_set, tables.set_value, tables.shot
    shift = hash_setting(into, "machine") - hash_setting(old, "machine")
    twins: dict[int, int] = {}
    for part in chunks(set_ids):
        rows = connection.execute(select(table.c.id, table.c.digest).where(table.c.id.in_(part))).all()
        digests = {row.id: digest_of_sum(int.from_bytes(row.digest, "little") + shift) for row in rows}
        known = select(table.c.id, table.c.digest).where(table.c.digest.in_(digests.values()))
        there = {bytes(row.digest): row.id for row in connection.execute(known)}
        fresh = [{"of_set": key, "new": digest} for key, digest in digests.items() if digest not in there]
        twins |= {key: there[digest] for key, digest in digests.items() if digest in there}
        if fresh:
            this = table.c.id == bindparam("of_set")
            connection.execute(update(table).where(this).values(digest=bindparam("new")), fresh)
    for part in chunks(sorted(twins), _PART):
        mapping = {key: twins[key] for key in part}
        moved = case(mapping, value=shot.c.set_id)
        connection.execute(update(shot).where(shot.c.set_id.in_(part)).values(set_id=moved))
        connection.execute(delete(content).where(content.c.set_id.in_(part)))
        connection.execute(delete(table).where(table.c.id.in_(part)))
    return len(twins)
