"""Scans joined and split by hand, and the undoing of it."""

from __future__ import annotations

import operator
from collections.abc import Collection, Iterable, Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, func, insert, select, update

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.names import insert_row
from nightfold.ledger.selecting import moment_us, scan_key
from nightfold.records import clean_text
from nightfold.scans.arrangements import Arrangement, read_arrangements
from nightfold.scans.assigning import DEFAULT_REJOIN_US, rejoin_times
from nightfold.scans.keeping import leading_axes, new_scan, set_axes, settle_axes
from nightfold.scans.listing import find_id, why_empty
from nightfold.scans.refolding import fold_span
from nightfold.scans.rounds import fold_label, move_shots, retire, swept_of
from nightfold.timestamps import find_zone, from_us, now_us, to_us

FEWEST_LETTERS = 4
"""So many letters of a uid name a shot, if no other of the scan begins so."""


def join_scans(connection: Connection, keys: Sequence[int | str], reason: str | None, by: str | None) -> int:
    """Bring the shots of scans into the earliest of them; return its id.

    Raises
    ------
    NotFound
        If there is no such scan, or it has no shots.
    ChoiceNeeded
        If these are not two scans or more of one sequence.
    """
    wanted = dict.fromkeys(find_id(connection, key) for key in keys)
    if len(wanted) < 2:
        named = ", ".join(map(str, keys)) or "none"
        raise ChoiceNeeded(f"join: found one scan ({named}), wanted two or more to make one of")
    scans = [_scan_row(connection, scan_id) for scan_id in wanted]
    if len({row.sequence_id for row in scans}) > 1:
        found = ", ".join(f"{_key(row)} of {row.sequence} on {row.machine}" for row in scans)
        raise ChoiceNeeded(f"join: found scans of several sequences ({found}), wanted those of one")
    shots = [shot for row in scans for shot in _shots_of(connection, row)]
    first = min(shots, key=lambda shot: (shot.started_us, shot.id)).from_scan
    axes = [axis for row in scans for axis in leading_axes(connection, row.id)]
    _enter(connection, "join", reason, by, [(shot, first) for shot in shots])
    _settle_found(connection, first, axes, guess=True)
    _fold_again(connection, scans, shots)
    return int(first)


def split_scan(
    connection: Connection, key: int | str, at: int | str | datetime, reason: str | None, by: str | None
) -> tuple[int, int]:
    """Part a scan in two, in order of time; return the ids of both, the first being that of the scan.

    Raises
    ------
    NotFound
        If there is no such scan, or `at` names nothing in it.
    ChoiceNeeded
        If one of the parts would be empty.
    """
    row = _scan_row(connection, find_id(connection, key))
    shots = _shots_of(connection, row)
    place = _place_of(shots, at, row)
    if not 0 < place < len(shots):
        raise ChoiceNeeded(f"split {_key(row)} {_wanted_place(shots, at, row.zone)}")
    axes = leading_axes(connection, row.id)
    number = 1
    if row.label is not None:
        scan = tables.scan
        own = select(func.max(scan.c.round)).where(
            scan.c.sequence_id == row.sequence_id, scan.c.label == row.label
        )
        number = connection.execute(own).scalar_one() + 1
    new = {"sequence_id": row.sequence_id, "label": row.label, "round": number, "origin": row.origin}
    second = new_scan(connection, new)
    goes_to = [(shot, row.id if k < place else second) for k, shot in enumerate(shots)]
    _enter(connection, "split", reason, by, goes_to)
    for scan_id in (row.id, second):
        _settle_found(connection, scan_id, axes)
    _fold_again(connection, [row], shots)
    return row.id, second


def undo_arrangement(connection: Connection, number: int, by: str | None) -> Arrangement:
    """Bring the shots of an arrangement back to the scans they were in, and return it.

    Raises
    ------
    NotFound
        If there is no arrangement of that number.
    ChoiceNeeded
        If it was undone before, or a later one has moved the same shots.
    """
    found = read_arrangements(connection, tables.arrangement.c.id == number)
    if not found:
        raise NotFound(
            f"arrangement {number}: not in this store; 'nightfold join --list' shows those there are"
        )
    if found[0].undone is not None:
        when = _local(to_us(found[0].undone), _zone_of(connection, found[0].machine))
        raise ChoiceNeeded(f"arrangement {number}: it was undone before, on {when}")
    later = _later(connection, number)
    if later:
        others = f"arrangement{'s' if len(later) > 1 else ''} {', '.join(map(str, later))}"
        raise ChoiceNeeded(
            f"arrangement {number}: {others} moved the same shots later; undo {later[-1]} first"
        )
    row, shot, whole = tables.arranged, tables.shot, tables.arrangement
    query = select(row, shot.c.id, shot.c.started_us, shot.c.sequence_id).join(
        shot, shot.c.id == row.c.shot_id
    )
    moved = list(connection.execute(query.where(row.c.arrangement_id == number)))
    done = {"undone_us": now_us(), "undone_by": by}
    connection.execute(update(whole).where(whole.c.id == number).values(**done))
    for origin in sorted({item.from_scan for item in moved}):
        move_shots(connection, origin, [item.id for item in moved if item.from_scan == origin])
    touched = sorted({scan_id for item in moved for scan_id in (item.from_scan, item.to_scan)})
    scans = [_scan_row(connection, scan_id) for scan_id in touched]
    for scan_id, heir in sorted({(item.to_scan, item.from_scan) for item in moved}):
        retire(connection, scan_id, heir)
    _fold_again(connection, scans, moved)
    return read_arrangements(connection, whole.c.id == number)[0]


def _zone_of(connection: Connection, machine: str) -> str:
    table = tables.machine
    return str(connection.execute(select(table.c.zone).where(table.c.name == machine)).scalar_one())


def _scan_row(connection: Connection, scan_id: int) -> Row[Any]:
    """Return a scan with the names of its sequence and machine."""
    scan, sequence, machine = tables.scan, tables.sequence, tables.machine
    query = (
        select(scan, sequence.c.name.label("sequence"), machine.c.name.label("machine"), machine.c.zone,
               machine.c.id.label("machine_id"))
        .join(sequence, sequence.c.id == scan.c.sequence_id)
        .join(machine, machine.c.id == sequence.c.machine_id)
    )  # fmt: skip
    return connection.execute(query.where(scan.c.id == scan_id)).one()


def _key(row: Row[Any]) -> str:
    return scan_key(row.id, row.label, row.round) or ""


def _shots_of(connection: Connection, scan: Row[Any]) -> Sequence[Row[Any]]:
    """Return the shots of a scan in order of time.

    Raises
    ------
    NotFound
        If it has none.
    """
    shot = tables.shot
    columns = shot.c.id, shot.c.uid, shot.c.started_us, shot.c.scan_id.label("from_scan")
    query = select(*columns).where(shot.c.scan_id == scan.id).order_by(shot.c.started_us, shot.c.id)
    shots: list[Row[Any]] = list(connection.execute(query))
    if not shots:
        raise NotFound(f"scan {_key(scan)}: {why_empty(connection, scan.id)}")
    return shots


def _place_of(shots: Sequence[Row[Any]], at: int | str | datetime, scan: Row[Any]) -> int:
    """Return how many shots stand before the place that a number of shots, a uid or a time names."""
    if hasattr(at, "__index__") and not isinstance(at, bool):
        return operator.index(at)
    uids = [shot.uid for shot in shots]
    if at in uids:
        return uids.index(str(at))
    try:
        us = moment_us(at, scan.zone)  # type: ignore[arg-type]
    except NotFound:
        return _beginning(uids, str(at), scan)
    return sum(shot.started_us < us for shot in shots)


def _wanted_place(shots: Sequence[Row[Any]], at: int | str | datetime, zone: str) -> str:
    """Return the place asked for and where one could be: in counts if a count was asked for, else in local times."""
    one_side = f"all its {len(shots)} shots would be on one side"
    if hasattr(at, "__index__"):
        count = operator.index(at)
        if len(shots) < 2:
            return f"after {count}: {one_side}, wanted a scan of two or more"
        return f"after {count}: {one_side}, wanted a count from 1 to {len(shots) - 1}"
    first, last = (_local(shot.started_us, zone) for shot in (shots[0], shots[-1]))
    return f"at {at}: {one_side}, wanted a place between {first} and {last}"


def _local(us: int, zone: str) -> str:
    """Return a time as the clocks of a machine show it, with the offset, to the second."""
    return from_us(us).astimezone(find_zone(zone)).isoformat(timespec="seconds")


def _beginning(uids: Sequence[str], text: str, scan: Row[Any]) -> int:
    """Return the place of the one shot whose uid begins so."""
    found = [place for place, uid in enumerate(uids) if uid.startswith(text)]
    if len(found) == 1 and len(text) >= FEWEST_LETTERS:
        return found[0]
    reason = f"{len(found)} shots of it begin so" if len(found) > 1 else "none of its shots begins so"
    raise NotFound(
        f"split {_key(scan)} at {text!r}: {reason}, and it is no time; wanted the uid of a shot "
        f"(at least {FEWEST_LETTERS} letters of it) or a time such as 2026-10-05T21:14"
    )


def _enter(
    connection: Connection, kind: str, reason: str | None, by: str | None, goes_to: Iterable[tuple[Any, int]]
) -> None:
    """Keep an arrangement and move its shots."""
    row = {"kind": kind, "reason": _clean(kind, reason), "by": by, "at_us": now_us()}
    number = insert_row(connection, tables.arrangement, row)
    rows = [
        {"arrangement_id": number, "shot_id": shot.id, "from_scan": shot.from_scan, "to_scan": scan_id}
        for shot, scan_id in goes_to
    ]
    connection.execute(insert(tables.arranged), rows)
    for target in sorted({entry["to_scan"] for entry in rows}):
        moved = [
            entry["shot_id"] for entry in rows if entry["to_scan"] == target and entry["from_scan"] != target
        ]
        move_shots(connection, target, moved)


def _clean(kind: str, reason: str | None) -> str | None:
    if reason is None:
        return None
    try:
        return clean_text(reason).strip() or None
    except ValueError as problem:
        raise ChoiceNeeded(f"{kind}: the reason holds a sign that is no text; wanted {problem}") from None


def _settle_found(
    connection: Connection, scan_id: int, axes: Collection[int], *, guess: bool = False
) -> None:
    """Enter what is known of a scan without a label from its shots: axes, plan and end.

    Parameters
    ----------
    axes : collection of int
        What was swept in the scans it was made of; kept where the records do not say what was.
    guess : bool
        Then whatever else was probably swept is an axis too, such as what changed from row to row.
    """
    row = _scan_row(connection, scan_id)
    if row.label is not None:
        return  # `fold_label` does it
    swept = list(dict.fromkeys([*axes, *swept_of(connection, scan_id)]))
    if guess and not swept_of(connection, scan_id):
        settle_axes(connection, scan_id, (), declared=False)
        swept += [axis for axis in leading_axes(connection, scan_id) if axis not in swept]
    set_axes(connection, scan_id, swept)
    settle_axes(connection, scan_id, swept)
    shot, scan = tables.shot, tables.scan
    own = select(shot).where(shot.c.scan_id == scan_id).order_by(shot.c.started_us.desc(), shot.c.id.desc())
    newest = connection.execute(own.limit(1)).one()
    planned = connection.execute(own.where(shot.c.planned_shots.isnot(None)).limit(1)).first()
    said = {
        "planned_shots": planned.planned_shots if planned else None,
        "closed_us": newest.started_us if newest.last else None,
    }
    connection.execute(update(scan).where(scan.c.id == scan_id).values(**said))


def _fold_again(connection: Connection, scans: Sequence[Row[Any]], shots: Sequence[Row[Any]]) -> None:
    """Fold the labels and the stretches of stream that scans came from, for their shots are held or free now."""
    ids = {shot.id for shot in shots}
    sequence_id = scans[0].sequence_id
    rejoin = rejoin_times(connection).get(scans[0].machine_id, DEFAULT_REJOIN_US)
    for label in sorted({row.label for row in scans if row.label is not None}):
        fold_label(connection, sequence_id, label, rejoin, ids)
    for scan_id in (row.id for row in scans if row.label is None):
        times = [shot.started_us for shot in shots if shot.from_scan == scan_id]
        if times:
            fold_span(connection, sequence_id, min(times), max(times), fresh=ids)


def _later(connection: Connection, number: int) -> list[int]:
    """Return the standing arrangements that moved shots of this one after it."""
    row, whole = tables.arranged, tables.arrangement
    own = select(row.c.shot_id).where(row.c.arrangement_id == number)
    query = (
        select(row.c.arrangement_id)
        .join(whole, whole.c.id == row.c.arrangement_id)
        .where(row.c.arrangement_id > number, whole.c.undone_us.is_(None), row.c.shot_id.in_(own))
        .distinct()
    )
    return sorted(connection.execute(query).scalars())
