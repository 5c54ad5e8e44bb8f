"""Folding the unlabelled shots of a stream where new ones came in, between one pause and the next."""

from __future__ import annotations

from bisect import bisect
from collections import ChainMap, Counter
from collections.abc import Collection, Mapping, Sequence, Set
from dataclasses import replace
from itertools import pairwise
from typing import Any

from sqlalchemy import ColumnElement, Connection, Row, and_, exists, or_, select, update

from nightfold import tables
from nightfold.ledger.pins import is_pinned, kept_scans, pinned_times
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import is_double
from nightfold.scans.folding import FoundScan, StreamShot, fold_stream
from nightfold.scans.keeping import new_scan, set_axes, settle_axes
from nightfold.scans.pauses import REACH as PAUSE_REACH
from nightfold.scans.pauses import find_pauses
from nightfold.scans.rounds import move_shots, retire
from nightfold.scans.sweeps import derived_sweeps
from nightfold.settings import token_of

REACH = 500
FARTHEST_US = 2 * 86_400_000_000
FOR_EVER_US = 2**62


def fold_span(
    connection: Connection, sequence_id: int, first_us: int, last_us: int, fresh: Collection[int] = ()
) -> None:
    """Fold a stream's unlabelled shots again, around the times of the shots just written.

    Scans that hold a shot of `fresh`, those whose settings have changed, have their axes looked at again in any case.

    The span reaches to the nearest pause on either side, so the outcome does not depend on the order of arrival; where
    the machine never pauses, to the bounds of the scans about 500 shots away.
    """
    rows = _span(connection, sequence_id, first_us, last_us)
    query = (
        select(tables.parameter.c.id, tables.parameter.c.name)
        .join(tables.sequence, tables.sequence.c.machine_id == tables.parameter.c.machine_id)
        .where(tables.sequence.c.id == sequence_id)
    )
    names = {row.id: row.name for row in connection.execute(query)}
    stream = _stream(connection, rows, names)
    cuts = {*_cuts(rows), *_cuts_by_hand(connection, sequence_id, rows)}
    bounds = [0, *sorted(cuts), len(rows)]
    found = [
        scan
        for start, stop in pairwise(bounds)
        for scan in fold_stream(_alone(stream[start:stop]), pause_us=FOR_EVER_US)
    ]
    _keep(connection, sequence_id, rows, found, {name: number for number, name in names.items()}, set(fresh))
    _bring_doubles(connection, sequence_id, rows)


def _cuts(rows: Sequence[Row[Any]]) -> list[int]:
    """Return where no scan goes on: after a pause, after a shot said to be the last, after the last planned one."""
    pauses = set(find_pauses([row.started_us for row in rows]))
    cuts, count = [], 0
    for place, row in enumerate(rows):
        ended = place > 0 and (rows[place - 1].last or count == rows[place - 1].planned_shots)
        if place > 0 and (place in pauses or ended):
            cuts.append(place)
            count = 0
        count = count + 1 if row.planned_shots is not None else 0
    return cuts


def _cuts_by_hand(connection: Connection, sequence_id: int, rows: Sequence[Row[Any]]) -> list[int]:
    """Return where shots would have stood whose scan a person chose: no scan goes on across them."""
    if not rows:
        return []
    started = [row.started_us for row in rows]
    places = (bisect(started, us) for us in pinned_times(connection, sequence_id, started[0], started[-1]))
    return sorted({place for place in places if 0 < place < len(rows)})


def _alone(shots: Sequence[StreamShot]) -> list[StreamShot]:
    """Return a piece of a stream whose first shot has nothing before it."""
    return [replace(shots[0], changed=frozenset()), *shots[1:]] if shots else []


def _span(connection: Connection, sequence_id: int, first_us: int, last_us: int) -> list[Row[Any]]:
    started = tables.shot.c.started_us
    earlier = and_(started < first_us, started >= first_us - FARTHEST_US)
    later = and_(started > last_us, started <= last_us + FARTHEST_US)
    before = _unlabelled(connection, sequence_id, earlier, newest_first=True)[::-1]
    inside = _unlabelled(connection, sequence_id, started.between(first_us, last_us), limit=None)
    after = _unlabelled(connection, sequence_id, later)
    rows = [*before, *inside, *after]
    cuts = [0, *find_pauses([row.started_us for row in rows]), len(rows)]
    # a new shot has a say in the gaps near it
    low = max(cut for cut in cuts if cut <= max(len(before) - PAUSE_REACH, 0))
    high = min(cut for cut in cuts if cut >= min(len(before) + len(inside) + PAUSE_REACH, len(rows)))
    low, high = _whole_scans(rows, low, high)
    if low == 0 and len(before) == REACH:
        low = _scan_bound(rows, 0, 1)
    if high == len(rows) and len(after) == REACH:
        high = _scan_bound(rows, len(rows) - 1, -1) + 1
    return rows[low:high]


def _whole_scans(rows: Sequence[Row[Any]], low: int, high: int) -> tuple[int, int]:
    """Return the span widened to cut through no scan as it stands: what counts as a pause may have changed."""
    while True:
        inside = {row.scan_id for row in rows[low:high]} - {None}
        places = [place for place, row in enumerate(rows) if row.scan_id in inside]
        wider = min([low, *places]), max([high, *(place + 1 for place in places)])
        if wider == (low, high):
            return wider
        low, high = wider


def _scan_bound(rows: Sequence[Row[Any]], start: int, step: int) -> int:
    """Return the first place, going inwards, that is not in the scan cut through at `start`."""
    scan_id, place = rows[start].scan_id, start
    while scan_id is not None and 0 <= place + step < len(rows) and rows[place].scan_id == scan_id:
        place += step
    return place


def _unlabelled(
    connection: Connection,
    sequence_id: int,
    when: ColumnElement[bool],
    *,
    newest_first: bool = False,
    limit: int | None = REACH,
) -> list[Row[Any]]:
    shot, scan = tables.shot, tables.scan
    own = and_(_loose(sequence_id), when, ~is_double(shot.c.id))
    order = (shot.c.started_us.desc(), shot.c.id.desc()) if newest_first else (shot.c.started_us, shot.c.id)
    query = (
        select(shot.c.id, shot.c.started_us, shot.c.scan_id, shot.c.set_id, shot.c.planned_shots, shot.c.last)
        .outerjoin(scan, scan.c.id == shot.c.scan_id)
        .where(own)
        .order_by(*order)
    )
    return list(connection.execute(query.limit(limit) if limit else query))


def _loose(sequence_id: int) -> ColumnElement[bool]:
    """Return the condition that folding has a say in the scan of a shot; wants the scan joined."""
    shot, scan = tables.shot, tables.scan
    free = or_(shot.c.scan_id.is_(None), scan.c.label.is_(None))
    return and_(shot.c.sequence_id == sequence_id, ~shot.c.reference, ~is_pinned(shot.c.id), free)


def _bring_doubles(connection: Connection, sequence_id: int, rows: Sequence[Row[Any]]) -> None:
    """Bring shots that are there a second time into the scan of the other one; they count for nothing in folding."""
    if not rows:
        return
    shot, scan = tables.shot, tables.scan
    when = shot.c.started_us.between(rows[0].started_us, rows[-1].started_us)
    query = select(shot.c.id, shot.c.started_us, shot.c.scan_id).outerjoin(scan, scan.c.id == shot.c.scan_id)
    doubles = connection.execute(query.where(_loose(sequence_id), when, is_double(shot.c.id))).all()
    if not doubles:
        return
    there = connection.execute(query.where(_loose(sequence_id), when, ~is_double(shot.c.id)))
    scan_at = {row.started_us: row.scan_id for row in there}
    for row in doubles:
        target = scan_at.get(row.started_us, row.scan_id)
        if target != row.scan_id:
            move_shots(connection, target, [row.id])
            if row.scan_id is not None:
                retire(connection, row.scan_id, target)


def _stream(connection: Connection, rows: Sequence[Row[Any]], names: Mapping[int, str]) -> list[StreamShot]:
    resting = _resting(connection, {row.set_id for row in rows}, names)
    moving, swept = _moving(connection, [row.id for row in rows], names)
    derived = derived_sweeps(connection, rows)
    for shot_id, tokens in derived.items():
        moving.setdefault(shot_id, {}).update(tokens)
        swept.setdefault(shot_id, set()).update(tokens)
    shots: list[StreamShot] = []
    last_set, last_moved, last_derived = None, dict[str, str](), set[str]()
    for row in rows:
        moved = moving.get(row.id, {})
        values = ChainMap(moved, resting[row.set_id])
        changed = frozenset[str]()
        if shots:
            previous = shots[-1].values
            looked_at = {*moved, *last_moved}
            if row.set_id != last_set:
                looked_at |= {*resting[row.set_id], *resting[last_set or 0]}
            looked_at -= derived.get(row.id, {}).keys() ^ last_derived
            changed = frozenset(name for name in looked_at if previous.get(name) != values.get(name))
        shots.append(StreamShot(row.id, row.started_us, frozenset(swept.get(row.id, ())), values, changed))
        last_set, last_moved, last_derived = row.set_id, moved, set(derived.get(row.id, ()))
    return shots


def _resting(connection: Connection, sets: set[int], names: Mapping[int, str]) -> dict[int, dict[str, str]]:
    kinds, table = _kinds(connection), tables.set_value
    found: dict[int, dict[str, str]] = {set_id: {} for set_id in sets}
    for part in chunks(sorted(sets)):
        for row in connection.execute(select(table).where(table.c.set_id.in_(part))):
            token = token_of(kinds[row.parameter_id], row.num, row.exact)
            found[row.set_id][names[row.parameter_id]] = token
    return found


def _moving(
    connection: Connection, shot_ids: Sequence[int], names: Mapping[int, str]
) -> tuple[dict[int, dict[str, str]], dict[int, set[str]]]:
    kinds, table = _kinds(connection), tables.shot_value
    values: dict[int, dict[str, str]] = {}
    swept: dict[int, set[str]] = {}
    for part in chunks(shot_ids):
        for row in connection.execute(select(table).where(table.c.shot_id.in_(part))):
            name = names[row.parameter_id]
            values.setdefault(row.shot_id, {})[name] = token_of(kinds[row.parameter_id], row.num, row.exact)
            if row.swept:
                swept.setdefault(row.shot_id, set()).add(name)
    return values, swept


def _kinds(connection: Connection) -> dict[int, str]:
    query = select(tables.parameter.c.id, tables.parameter.c.kind)
    return {row.id: row.kind for row in connection.execute(query)}


def _keep(
    connection: Connection,
    sequence_id: int,
    rows: Sequence[Row[Any]],
    found: Sequence[FoundScan],
    ids: Mapping[str, int],
    fresh: Set[int],
) -> None:
    """Bring the scans found into the store; a scan keeps its id as long as it keeps most of its shots."""
    by_id = {row.id: row for row in rows}
    now = {row.id: row.scan_id for row in rows}
    free = {scan_id for scan_id in now.values() if scan_id is not None}
    heirs: dict[int, int] = {}
    placed: set[int] = set()
    touched: dict[int, tuple[list[int], bool]] = {}
    for scan in found:
        counts: dict[int, int] = {}
        for shot_id in scan.shot_ids:
            old = now[shot_id]
            if old is not None:
                counts[old] = counts.get(old, 0) + 1
        best = max((old for old in counts if old in free), key=lambda old: counts[old], default=None)
        if best is None:
            best = _find_dissolved(connection, sequence_id, scan.shot_ids, set(now.values()))
        if best is None:
            row = {"sequence_id": sequence_id, "label": None, "round": 1, "origin": scan.origin}
            best = new_scan(connection, row)
        free.discard(best)
        members = [by_id[shot_id] for shot_id in scan.shot_ids]
        planned = [row.planned_shots for row in members if row.planned_shots is not None]
        said = {
            "origin": scan.origin,
            "planned_shots": planned[-1] if planned else None,
            "closed_us": max((row.started_us for row in members if row.last), default=None),
        }
        connection.execute(update(tables.scan).where(tables.scan.c.id == best).values(**said))
        heirs |= dict.fromkeys(counts, best)
        moved = [shot_id for shot_id in scan.shot_ids if now[shot_id] != best]
        lost = sum(1 for old in now.values() if old == best) > counts.get(best, 0)
        move_shots(connection, best, moved)
        if moved or lost or not fresh.isdisjoint(scan.shot_ids):
            touched[best] = [ids[name] for name in scan.axes], scan.origin == "declared"
        placed.update(scan.shot_ids)
    loose = [shot_id for shot_id, scan_id in now.items() if scan_id is not None and shot_id not in placed]
    move_shots(connection, None, loose)
    for scan_id, (axes, declared) in touched.items():
        set_axes(connection, scan_id, axes)
        settle_axes(connection, scan_id, axes, declared=declared)
    for scan_id in free:
        retire(connection, scan_id, heirs.get(scan_id))


def _find_dissolved(
    connection: Connection, sequence_id: int, shot_ids: Sequence[int], taken: Set[int | None]
) -> int | None:
    """Return a scan that dissolved, left without shots, whose kept fits looked at most of these shots."""
    fit, use, scan, shot = tables.fit, tables.fit_shot, tables.scan, tables.shot
    empty = ~exists().where(shot.c.scan_id == scan.c.id)
    query = (
        select(scan.c.id, use.c.shot_id)
        .join(fit, fit.c.scan_id == scan.c.id)
        .join(use, use.c.fit_id == fit.c.id)
        .where(scan.c.sequence_id == sequence_id, scan.c.label.is_(None), empty)
        .distinct()
    )
    counts: Counter[int] = Counter()
    for part in chunks(list(shot_ids)):
        counts.update(row.id for row in connection.execute(query.where(use.c.shot_id.in_(part))))
    held = [scan_id for scan_id in sorted(counts.keys() - taken) if 2 * counts[scan_id] > len(shot_ids)]
    kept = kept_scans(connection) if held else set()
    return max((scan_id for scan_id in held if scan_id not in kept), key=counts.__getitem__, default=None)
