"""What the records of shots declared as swept: recorded parameters, flagged where they move, and derived ones."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from sqlalchemy import ColumnElement, Connection, Row, select, union_all

from nightfold import tables
from nightfold.ledger.columns import setting_columns
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import named_by_id
from nightfold.settings import token_of


def declared_sweeps(connection: Connection, shots: ColumnElement[bool]) -> dict[int, set[int]]:
    """Return the ids of the parameters that each shot declares as swept, for the shots that meet a condition."""
    shot, move, derived = tables.shot, tables.shot_value, tables.swept_derived
    flagged = select(move.c.shot_id, move.c.parameter_id).join(shot, shot.c.id == move.c.shot_id)
    named = select(derived.c.shot_id, derived.c.parameter_id).join(shot, shot.c.id == derived.c.shot_id)
    found: dict[int, set[int]] = {}
    for row in connection.execute(union_all(flagged.where(shots, move.c.swept), named.where(shots))):
        found.setdefault(row.shot_id, set()).add(row.parameter_id)
    return found


def derived_sweeps(connection: Connection, rows: Sequence[Row[Any]]) -> dict[int, dict[str, str]]:
    """Return the tokens of the derived parameters that shots declare as swept, by shot and name."""
    table = tables.swept_derived
    declared: dict[int, set[int]] = {}
    for part in chunks([row.id for row in rows]):
        for item in connection.execute(select(table).where(table.c.shot_id.in_(part))):
            declared.setdefault(item.shot_id, set()).add(item.parameter_id)
    if not declared:
        return {}
    named = named_by_id(connection, tables.parameter, sorted(set().union(*declared.values())))
    own = [row for row in rows if row.id in declared]
    columns = setting_columns(connection, own, named, None)
    return {
        row.id: {
            item.name: token_of("number", float(columns[item.name][place]), None)
            for item in named
            if item.ids[0] in declared[row.id]
        }
        for place, row in enumerate(own)
    }
