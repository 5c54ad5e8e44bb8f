"""Shots that are there a second time, taken under another name of their machine: which one counts in their place."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.ledger.correcting import digests_before
from nightfold.ledger.selecting import is_double


def find_counterpart(connection: Connection, double: Row[Any]) -> Row[Any] | None:
    """Return the shot that counts in place of one: of its time, sequence and settings, as taken or as corrected."""
    shot = tables.shot
    together = (shot.c.sequence_id == double.sequence_id, shot.c.started_us == double.started_us)
    own = {bytes(double.values_digest), *digests_before(connection, double.id)}
    for row in connection.execute(select(shot).where(*together, ~is_double(shot.c.id)).order_by(shot.c.id)):
        if not own.isdisjoint({bytes(row.values_digest), *digests_before(connection, row.id)}):
            return row
    return None
