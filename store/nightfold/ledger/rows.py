"""Plain inserts of many rows, in the driver's own words: the hot path of taking shots."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from typing import Any

from sqlalchemy import Connection, Table, select

CHUNK = 500


@cache
def _statement(table: Table, mark: str) -> str:
    names = ", ".join(f'"{column.name}"' for column in table.columns)
    marks = ", ".join([mark] * len(table.columns))
    return f"INSERT INTO {table.name} ({names}) VALUES ({marks})"


def insert_many(connection: Connection, table: Table, rows: Sequence[tuple[Any, ...]]) -> None:
    """Insert rows that give every column of the table in its order."""
    if rows:
        mark = "?" if connection.dialect.paramstyle == "qmark" else "%s"
        connection.exec_driver_sql(_statement(table, mark), list(rows))


def next_id(connection: Connection, table: Table) -> int:
    """Return the first free id; the caller is the only writer, so it stays free."""
    last = connection.execute(select(table.c.id).order_by(table.c.id.desc()).limit(1)).scalar()
    return (last or 0) + 1


def chunks(items: Sequence[Any], size: int = CHUNK) -> list[Sequence[Any]]:
    """Return the items in pieces that fit into one IN list."""
    return [items[start : start + size] for start in range(0, len(items), size)]
