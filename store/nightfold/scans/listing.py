"""Finding scans in the store, one by its key or all of them."""

from __future__ import annotations

import operator
from itertools import pairwise
from statistics import median_low
from typing import Any

from sqlalchemy import Connection, Row, func, select

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.pins import kept_scans
from nightfold.ledger.selecting import near_miss, set_aside_now
from nightfold.scans.arrangements import arranged_numbers, where_gone
from nightfold.scans.scan import Scan
from nightfold.session import Session
from nightfold.timestamps import from_us, now_us

IDLE_CYCLES = 5
_FIRST_CYCLE_US = 60_000_000
_CYCLES_LOOKED_AT = 20


def list_scans(session: Session) -> list[Scan]:
    """Return every scan, in the order in which they began."""
    with session.reading() as connection:
        return _read_scans(connection, session, None)


def find_scan(session: Session, key: int | str) -> Scan:
    """Return the scan that an id, a label (newest round) or ``label#round`` names.

    Raises
    ------
    NotFound
        If there is none.
    ChoiceNeeded
        If several sequences use the label.
    """
    with session.reading() as connection:
        scan_id = find_id(connection, key)
        found = _read_scans(connection, session, scan_id)
        if not found:
            raise NotFound(f"scan {key!r}: {why_empty(connection, scan_id)}")
    return found[0]


def why_empty(connection: Connection, scan_id: int) -> str:
    """Return why a scan has no shots."""
    step = where_gone(connection, scan_id)
    if step is None:
        return "it has no shots any more"
    return (
        f"its shots were brought into {' and '.join(step.after)} by hand; "
        f"'nightfold join --undo {step.number}' takes that back"
    )


def find_id(connection: Connection, key: int | str) -> int:
    """Return the id of the scan that a key names; it may have no shots if they were arranged by hand.

    Raises
    ------
    NotFound, ChoiceNeeded
        As of `find_scan`.
    """
    scan = tables.scan
    sequence, machine = tables.sequence, tables.machine
    query = (
        select(
            scan.c.id, scan.c.label, scan.c.round, scan.c.sequence_id,
            sequence.c.name.label("sequence"), machine.c.name.label("machine"),
        )
        .join(sequence, sequence.c.id == scan.c.sequence_id)
        .join(machine, machine.c.id == sequence.c.machine_id)
    )  # fmt: skip
    rows: list[Row[Any]] = list(connection.execute(query))
    if hasattr(key, "__index__") and not isinstance(key, bool):  # whole numbers of numpy too
        found = [row for row in rows if row.id == operator.index(key)]
    else:
        found = _by_text(rows, str(key))
    if not found:
        raise NotFound(f"scan {key!r}: not among the {len(rows)} scans of this store; {_nearest(rows, key)}")
    last = _last_shots(connection, [row.id for row in found])
    if len({row.sequence_id for row in found}) > 1:
        found = [row for row in found if row.id not in last or last[row.id] is not None]
    if len({row.sequence_id for row in found}) > 1:
        choices = ", ".join(f"{row.id} ({row.machine}, {row.sequence})" for row in found)
        raise ChoiceNeeded(
            f"scan {key!r}: several machines or sequences use this label; name it by id: {choices}"
        )
    return int(max(found, key=lambda row: (last.get(row.id) or 0, row.round)).id)


def _last_shots(connection: Connection, ids: list[int]) -> dict[int, int | None]:
    """Return when the last shot of each round started, if people have arranged some; else they are numbered by time."""
    if len(ids) < 2 or kept_scans(connection).isdisjoint(ids):
        return {}
    shot = tables.shot
    last = select(shot.c.scan_id, func.max(shot.c.started_us).label("last_us")).where(shot.c.scan_id.in_(ids))
    found = {row.scan_id: row.last_us for row in connection.execute(last.group_by(shot.c.scan_id))}
    return {scan_id: found.get(scan_id) for scan_id in ids}


def _nearest(rows: list[Row[Any]], key: int | str) -> str:
    label = str(key).rpartition("#")[0]
    rounds = sorted(row.round for row in rows if row.label == label)
    if rounds:
        return f"label {label!r} has the rounds {', '.join(map(str, rounds))}"
    return (
        f"of labels {near_miss(str(key), dict.fromkeys(row.label for row in rows if row.label is not None))}"
    )


def _by_text(rows: list[Row[Any]], key: str) -> list[Row[Any]]:
    """Return the scans that a text names: as a whole label first, then ``label#round``, then an id."""
    found = [row for row in rows if row.label == key]
    label, mark, number = key.rpartition("#")
    if not found and mark and number.isascii() and number.isdigit():
        found = [row for row in rows if row.label == label and row.round == int(number)]
    if not found and key.isascii() and key.isdigit():
        found = [row for row in rows if row.id == int(key)]
    return found


def _read_scans(connection: Connection, session: Session, scan_id: int | None) -> list[Scan]:
    scan, shot, sequence, machine = tables.scan, tables.shot, tables.sequence, tables.machine
    taken = (
        select(
            shot.c.scan_id, func.count().label("taken"),
            func.min(shot.c.started_us).label("first_us"), func.max(shot.c.started_us).label("last_us"),
        )
        .where(shot.c.scan_id.isnot(None) if scan_id is None else shot.c.scan_id == scan_id)
        .group_by(shot.c.scan_id)
        .subquery()
    )  # fmt: skip
    query = (
        select(
            scan, sequence.c.name.label("sequence"), machine.c.name.label("machine"), machine.c.zone,
            machine.c.id.label("machine_id"), taken.c.taken, taken.c.first_us, taken.c.last_us,
        )
        .join(taken, taken.c.scan_id == scan.c.id)
        .join(sequence, sequence.c.id == scan.c.sequence_id)
        .join(machine, machine.c.id == sequence.c.machine_id)
        .order_by(taken.c.first_us, scan.c.id)
    )  # fmt: skip
    rows = list(connection.execute(query))
    aside = _set_aside_counts(connection, scan_id)
    newest = {key: _newest_first_us(connection, key) for key in {row.sequence_id for row in rows}}
    arranged = arranged_numbers(connection)
    complete = {row.id: _is_complete(connection, row, newest[row.sequence_id]) for row in rows}
    return [
        _make_scan(row, session, aside.get(row.id, 0), complete[row.id], arranged.get(row.id, ()))
        for row in rows
    ]


def _make_scan(
    row: Row[Any], session: Session, aside: int, complete: bool, arranged: tuple[int, ...]
) -> Scan:
    return Scan(
        id=row.id,
        label=row.label,
        round=row.round,
        machine=row.machine,
        sequence=row.sequence,
        zone=row.zone,
        origin=row.origin,
        shots=row.taken - aside,
        set_aside=aside,
        first=from_us(row.first_us),
        last=from_us(row.last_us),
        complete=complete,
        arranged=arranged,
        _session=session,
        _machine_id=row.machine_id,
    )


def _is_complete(connection: Connection, row: Row[Any], newest_first_us: int) -> bool:
    """Planned shots reached, said to be the last, overtaken by a later scan of its sequence, or idle for 5 cycles."""
    if row.closed_us is not None or (row.planned_shots is not None and row.taken >= row.planned_shots):
        return True
    if newest_first_us > row.last_us:
        return True
    return bool(now_us() - row.last_us > IDLE_CYCLES * _cycle_us(connection, row.id))


def _cycle_us(connection: Connection, scan_id: int) -> int:
    """Return the usual interval of the last shots of a scan: a night without shots does not make it longer."""
    started = tables.shot.c.started_us
    newest = select(started).where(tables.shot.c.scan_id == scan_id).order_by(started.desc())
    times: list[int] = list(connection.execute(newest.limit(_CYCLES_LOOKED_AT + 1)).scalars())
    return median_low([later - earlier for later, earlier in pairwise(times)] or [_FIRST_CYCLE_US])


def _newest_first_us(connection: Connection, sequence_id: int) -> int:
    """Return when the scan to which a sequence's newest scanned shot belongs began."""
    shot = tables.shot
    newest = (
        select(shot.c.scan_id)
        .where(shot.c.sequence_id == sequence_id, shot.c.scan_id.isnot(None))
        .order_by(shot.c.started_us.desc())
        .limit(1)
        .scalar_subquery()
    )
    return (
        connection.execute(select(func.min(shot.c.started_us)).where(shot.c.scan_id == newest)).scalar() or 0
    )


def _set_aside_counts(connection: Connection, scan_id: int | None) -> dict[int, int]:
    shot = tables.shot
    query = select(shot.c.scan_id, func.count().label("aside")).where(set_aside_now(shot.c.id))
    query = query.where(shot.c.scan_id.isnot(None) if scan_id is None else shot.c.scan_id == scan_id)
    return {row.scan_id: row.aside for row in connection.execute(query.group_by(shot.c.scan_id))}
