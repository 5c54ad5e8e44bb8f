"""The versions of derived quantities of two machines become those of one."""

from __future__ import annotations

import json

from sqlalchemy import Connection, select, update

from nightfold import tables
from nightfold.ledger.deriving import version_rows
from nightfold.ledger.names import MachineNames
from nightfold.merging.rows import point_to

_Numbers = dict[tuple[str, str], str]


def join_versions(connection: Connection, old: MachineNames, into: MachineNames) -> None:
    """Give the expressions of one machine numbers after the other's, and let the fits of its scans say so.

    To be done while the sequences are still those of the old machine.
    """
    table = tables.derivation
    known: dict[tuple[str, str, str], tuple[int, str]] = {}
    highest: dict[str, int] = {}
    for row, said in version_rows(connection, into.name):
        known[row.name, said["expression"], said["unit"]] = row.id, row.version
        highest[row.name] = max(highest.get(row.name, 0), int(row.version))
    numbers: _Numbers = {}
    twins: dict[int, int] = {}
    for row, said in list(version_rows(connection, old.name)):
        twin = known.get((row.name, said["expression"], said["unit"]))
        if twin is not None:
            twins[row.id], numbers[row.name, row.version] = twin
            continue
        highest[row.name] = highest.get(row.name, 0) + 1
        numbers[row.name, row.version] = version = str(highest[row.name])
        settings = json.dumps({**said, "machine": into.name}, ensure_ascii=False)
        own = update(table).where(table.c.id == row.id)
        connection.execute(own.values(version=version, settings=settings))
    point_to(connection, table, twins)
    if numbers:
        _renumber_fits(connection, old.id, numbers)


def _renumber_fits(connection: Connection, machine_id: int, numbers: _Numbers) -> None:
    fit, scan, sequence = tables.fit, tables.scan, tables.sequence
    query = (
        select(fit.c.id, fit.c.settings)
        .join(scan, scan.c.id == fit.c.scan_id)
        .join(sequence, sequence.c.id == scan.c.sequence_id)
        .where(sequence.c.machine_id == machine_id)
    )
    for row in connection.execute(query).all():
        settings = json.loads(row.settings)
        if used := settings.get("derived"):
            settings["derived"] = {
                name: numbers.get((name, version), version) for name, version in used.items()
            }
            changed = update(fit).where(fit.c.id == row.id)
            connection.execute(changed.values(settings=json.dumps(settings, default=float)))
