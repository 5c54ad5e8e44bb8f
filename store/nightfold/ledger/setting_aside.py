"""Leaving shots out of results, with a reason, and putting them back; nothing is ever deleted."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from sqlalchemy import Connection, Row, func, insert, select, update

from nightfold import tables
from nightfold.errors import NotFound, RequestError
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import set_aside_now
from nightfold.records import clean_text
from nightfold.timestamps import now_us

_SHORTEST = 4
"""Letters of the beginning of a uid."""


def find_shots(connection: Connection, uids: Sequence[str]) -> dict[str, Row[Any]]:
    """Return the rows of shots by uid, or by the beginning of one where only one shot has it.

    Raises
    ------
    NotFound
        If there is no such shot, or several begin so.
    """
    shot = tables.shot
    found: dict[str, Row[Any]] = {}
    for part in chunks(list(dict.fromkeys(uids))):
        for row in connection.execute(select(shot).where(shot.c.uid.in_(part))):
            found[row.uid] = row
    for uid in uids:
        if uid not in found:
            found[uid] = _by_beginning(connection, uid)
    return {uid: found[uid] for uid in uids}


def _by_beginning(connection: Connection, uid: str) -> Row[Any]:
    shot = tables.shot
    rows = []
    if len(uid) >= _SHORTEST:
        # a range can use the index, and SQLite's LIKE takes small and large letters as one
        near = shot.c.uid.between(uid, uid + "\U0010ffff")
        begins = near & (func.substr(shot.c.uid, 1, len(uid)) == uid)
        rows = list(connection.execute(select(shot).where(begins).limit(2)))
    if len(rows) == 1:
        return rows[0]
    reason = f"several shots begin so, such as {rows[0].uid}" if rows else "no such uid in this store"
    if not rows and len(uid) < _SHORTEST:
        reason += f"; as the beginning of one it is too short, that needs at least {_SHORTEST} letters"
    raise NotFound(f"shot {uid!r}: {reason}")


def clean_reason(what: str, reason: str) -> str:
    """Return a reason as it is kept, without blanks around it; `what` is done for it.

    Raises
    ------
    RequestError
        If there is none.
    """
    try:
        reason = clean_text(reason).strip()
    except ValueError:
        reason = ""
    if not reason:
        raise RequestError(
            f"{what}: found no reason, wanted a few words that say why, without control characters"
        )
    return reason


def set_shots_aside(
    connection: Connection, uids: Sequence[str], reason: str, by: str | None, rule: str | None
) -> int:
    """Set shots aside; return how many were not so already.

    Raises
    ------
    NotFound, ValueError
        If a shot is not there, or no reason is given.
    """
    reason = clean_reason("set aside", reason)
    rows = find_shots(connection, uids)
    already = _aside(connection, [row.id for row in rows.values()])
    new = {row.id for row in rows.values()} - already
    at_us = now_us()
    values = [
        {"shot_id": key, "reason": reason, "by": by, "rule": rule, "at_us": at_us} for key in sorted(new)
    ]
    if values:
        connection.execute(insert(tables.set_aside), values)
    return len(values)


def put_shots_back(connection: Connection, uids: Sequence[str], by: str | None) -> int:
    """Take shots into results again; return how many were set aside."""
    rows = find_shots(connection, uids)
    aside = _aside(connection, [row.id for row in rows.values()])
    table = tables.set_aside
    for part in chunks(sorted(aside)):
        open_now = table.c.shot_id.in_(part) & table.c.lifted_us.is_(None)
        connection.execute(update(table).where(open_now).values(lifted_us=now_us(), lifted_by=by))
    return len(aside)


def _aside(connection: Connection, shot_ids: Sequence[int]) -> set[int]:
    shot = tables.shot
    found: set[int] = set()
    for part in chunks(list(shot_ids)):
        query = select(shot.c.id).where(shot.c.id.in_(part), set_aside_now(shot.c.id))
        found.update(connection.execute(query).scalars())
    return found
