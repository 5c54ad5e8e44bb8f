"""Where records came from: the file, how far it was read, and what was refused in it."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, and_, delete, insert, select, update

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.names import insert_row
from nightfold.ledger.outcome import Incoming
from nightfold.timestamps import now_us

_HEAD = 65536


class SourceLog:
    """The entry of one file in the store.

    Parameters
    ----------
    path : Path
        The file; entered by its absolute path.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        with path.open("rb") as file:
            self.fingerprint = hashlib.sha256(file.read(_HEAD)).hexdigest()
        self.id = 0

    def enter(self, connection: Connection) -> int:
        """Return the file's id; an unknown one is entered."""
        table = tables.source
        where = str(self.path.absolute())
        found = connection.execute(select(table.c.id).where(table.c.path == where)).scalar()
        if found is None:
            row = {"path": where, "fingerprint": self.fingerprint, "position": 0}
            found = insert_row(connection, table, row)
        self.id = found
        return found

    def save(
        self,
        connection: Connection,
        items: Sequence[Incoming],
        refused: Sequence[tuple[Incoming, RecordError]],
    ) -> None:
        """Enter how far the file is taken, and what was refused, in the transaction of the shots themselves."""
        table, refusal = tables.source, tables.refusal
        first, last = items[0].byte, items[-1].byte
        values: dict[str, Any] = {"position": last, "fingerprint": self.fingerprint}
        connection.execute(update(table).where(table.c.id == self.id).values(**values))
        read_again = and_(refusal.c.source_id == self.id, refusal.c.byte.between(first, last))
        connection.execute(delete(refusal).where(read_again))
        at_us = now_us()
        rows = [
            {
                "source_id": self.id,
                "byte": item.byte,
                "line": item.line,
                "reason": str(problem),
                "at_us": at_us,
            }
            for item, problem in {item.byte: (item, problem) for item, problem in refused}.values()
        ]
        if rows:
            connection.execute(insert(refusal), rows)
