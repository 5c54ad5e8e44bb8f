"""The rounds of a label: one scan as long as its shots come close together and sweep the same, until it is ended."""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import count
from typing import Any

from sqlalchemy import Connection, Row, case, delete, func, select, update

from nightfold import tables
from nightfold.ledger.notes import hand_over_notes, has_notes, scan_subject
from nightfold.ledger.pins import kept_scans, read_pins
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import is_double
from nightfold.scans.keeping import new_scan, set_axes, settle_axes
from nightfold.scans.sweeps import declared_sweeps

ALWAYS_SETTLED = 64


@dataclass(slots=True)
class Round:
    """One round of a label as far as it has come."""

    scan_id: int
    swept: frozenset[int]
    last_us: int
    shots: int
    planned: int | None = None
    closed_us: int | None = None
    late: bool = False
    arranged: bool = False
    settled_at: int = 0
    seen: set[tuple[bytes, frozenset[str]]] = field(default_factory=set)

    def takes(self, started_us: int, swept: Sequence[int], rejoin_us: int) -> bool:
        """Return whether a shot of that time and sweep resumes this round."""
        if self.arranged or started_us < self.last_us:  # then all shots of the label are looked at
            self.late = True
            return True
        if self.closed_us is not None or (self.planned is not None and self.shots >= self.planned):
            return False
        return started_us - self.last_us <= rejoin_us and _same_sweep(self.swept, frozenset(swept))

    def watch_settings(self, set_digest: bytes, moving: Iterable[str]) -> None:
        """Note what moved: what has moved in every combination seen before needs no second look at the axes."""
        pattern = set_digest, frozenset(moving)
        if pattern not in self.seen:
            self.seen.add(pattern)
            self.settled_at = 0

    @property
    def unsettled(self) -> bool:
        """Whether the axes must be looked at again: on anything new, and whenever the round has grown by a quarter."""
        return self.shots < ALWAYS_SETTLED or self.shots >= 1.25 * self.settled_at

    def add(self, started_us: int, swept: Sequence[int], planned: int | None, last: bool) -> None:
        """Count a shot in."""
        self.shots += 1
        self.swept = self.swept or frozenset(swept)
        self.last_us = max(self.last_us, started_us)
        self.planned = planned if planned is not None else self.planned
        if last:
            self.closed_us = max(started_us, self.closed_us or started_us)


def _same_sweep(one: frozenset[int], other: frozenset[int]) -> bool:
    """Whether two shots of a label sweep the same; one that does not say so sweeps what the others do."""
    return one == other or not one or not other


@dataclass(frozen=True, slots=True)
class _Member:
    id: int
    started_us: int
    swept: frozenset[int]
    scan_id: int
    planned: int | None
    last: bool
    double: bool


def open_round(
    connection: Connection, sequence_id: int, label: str, started_us: int, swept: Sequence[int]
) -> Round:
    """Enter a new round of a label."""
    rows, kept = _rounds_of(connection, sequence_id, label), kept_scans(connection)
    after = max((row.round for row in rows if row.id not in kept), default=0)
    number = next(_free_numbers(rows, kept, after))
    row = {"sequence_id": sequence_id, "label": label, "round": number, "origin": "label"}
    scan_id = new_scan(connection, row)
    set_axes(connection, scan_id, swept)
    arranged = _lost_shots(connection, sequence_id, rows, kept)
    return Round(scan_id, frozenset(swept), started_us, 0, arranged=arranged)


def _rounds_of(connection: Connection, sequence_id: int, label: str) -> list[Row[Any]]:
    """Return the scans of a label, also those without shots, by their number."""
    scan = tables.scan
    query = select(scan).where(scan.c.sequence_id == sequence_id, scan.c.label == label)
    return list(connection.execute(query.order_by(scan.c.round)))


def newest_round(connection: Connection, sequence_id: int, label: str) -> Round | None:
    """Return the round of a label that has the latest shot, as it is in the store."""
    shot = tables.shot
    rows = _rounds_of(connection, sequence_id, label)
    kept = kept_scans(connection)
    span = select(func.max(shot.c.started_us), func.count(case((~is_double(shot.c.id), 1))))
    found = None
    for row in rows if kept else rows[-1:]:  # where nobody arranged anything, rounds are numbered by time
        last, shots = connection.execute(span.where(shot.c.scan_id == row.id)).one()
        if last is not None and (found is None or last > found.last_us):
            found = Round(row.id, swept_of(connection, row.id), last, shots, row.planned_shots, row.closed_us)
            found.arranged = row.id in kept
    if found is not None and not found.arranged:
        found.arranged = _lost_shots(connection, sequence_id, rows, kept)
    return found


def _lost_shots(
    connection: Connection, sequence_id: int, rows: Sequence[Row[Any]], kept: Collection[int]
) -> bool:
    """Whether shots of a label were brought into scans of another one, or of none."""
    own = {row.id for row in rows}
    if own.isdisjoint(kept):
        return False
    pins = read_pins(connection, sequence_id).values()
    return any(pin.origin in own and pin.scan not in own for pin in pins)


def save_progress(connection: Connection, current: Round) -> None:
    """Enter what the round's records said of its plan and its end."""
    table = tables.scan
    connection.execute(
        update(table)
        .where(table.c.id == current.scan_id)
        .values(planned_shots=current.planned, closed_us=current.closed_us)
    )


def fold_label(
    connection: Connection, sequence_id: int, label: str, rejoin_us: int, fresh: Collection[int]
) -> None:
    """Cut all shots of a label into rounds again, by the time they started, whatever the order they came in.

    Shots that a person arranged stay where they are. Those that would be of one round with them go to the scan of the
    arranged shot before them (or else after them).

    Parameters
    ----------
    fresh : collection of int
        Ids of the shots that came now: the rounds they are in have their axes looked at again.
    """
    rows = _rounds_of(connection, sequence_id, label)
    own = {row.id for row in rows}
    pins = read_pins(connection, sequence_id)
    kept = kept_scans(connection)
    away = [shot_id for shot_id, pin in pins.items() if pin.origin in own and pin.scan not in own]
    members = _members(connection, sorted(own), away)
    guests = {member.id for member in members if member.id in pins and pins[member.id].origin not in own}
    rounds = _cut([member for member in members if member.id not in guests], rejoin_us)
    arranged, groups = _around_pins(rounds, {key: pin.scan for key, pin in pins.items()}, own)
    for member in members:
        if member.id in guests:
            arranged.setdefault(member.scan_id, []).append(member)
    for group in arranged.values():
        group.sort(key=_in_time)
    free = [row.id for row in rows if row.id not in kept]
    chosen = _choose_scans(connection, sequence_id, label, groups, free)
    for position, scan_id in enumerate([*chosen, *free]):  # out of each other's way first: rounds are unique
        _enter(connection, scan_id, round=-1000 - position)
    for scan_id, number in zip(chosen, _free_numbers(rows, kept, 0), strict=False):
        _enter(connection, scan_id, round=number)
    placed = [*zip(chosen, groups, strict=True), *arranged.items()]
    for scan_id, group in placed:
        newest = next((member for member in reversed(group) if not member.double), group[-1])
        ended = newest.started_us if newest.last else None
        _enter(connection, scan_id, planned_shots=_plan_of(group), closed_us=ended)
        move_shots(connection, scan_id, [member.id for member in group if member.scan_id != scan_id])
    for gone in free:
        held = {scan_id: _held(group, gone) for scan_id, group in placed}
        retire(connection, gone, max(held, key=held.__getitem__, default=None))
    before = Counter(member.scan_id for member in members)
    for scan_id, group in placed:
        lost = before[scan_id] > _held(group, scan_id)
        if lost or any(member.scan_id != scan_id or member.id in fresh for member in group):
            settle_axes(connection, scan_id, frozenset[int]().union(*(member.swept for member in group)))


def _choose_scans(
    connection: Connection,
    sequence_id: int,
    label: str,
    groups: Sequence[Sequence[_Member]],
    free: list[int],
) -> list[int]:
    """Return a scan for each round, taken out of the free ones: each keeps the id most of its shots had."""
    chosen: list[int] = []
    for group in groups:
        wanted = max(free, key=lambda scan_id: _held(group, scan_id), default=None)
        if wanted is None or not _held(group, wanted):
            row = {"sequence_id": sequence_id, "label": label, "round": -1 - len(chosen), "origin": "label"}
            wanted = new_scan(connection, row)
        else:
            free.remove(wanted)
        chosen.append(wanted)
    return chosen


def _around_pins(
    rounds: Sequence[Sequence[_Member]], pinned: Mapping[int, int], own: set[int]
) -> tuple[dict[int, list[_Member]], list[list[_Member]]]:
    """Return the shots of each arranged scan of a label, and the rounds that nobody arranged.

    Parameters
    ----------
    rounds : sequence of sequence
        What the rounds were if nobody had arranged anything.
    pinned : mapping
        The scan of each shot that was arranged.
    own : set of int
        The scans of the label.
    """
    arranged: dict[int, list[_Member]] = {}
    loose: list[list[_Member]] = []
    for group in rounds:
        stay = [member for member in group if pinned.get(member.id, member.scan_id) in own]
        here = next((pinned[member.id] for member in stay if member.id in pinned), None)
        if here is None:
            loose += [stay] if stay else []
            continue
        for member in stay:
            here = pinned.get(member.id, here)
            arranged.setdefault(here, []).append(member)
    return arranged, loose


def _free_numbers(rows: Sequence[Row[Any]], kept: Collection[int], after: int) -> Iterator[int]:
    """Return the numbers after one that no arranged round of a label holds."""
    held = {row.round for row in rows if row.id in kept}
    return (number for number in count(after + 1) if number not in held)


def _enter(connection: Connection, scan_id: int, **values: int | None) -> None:
    scan = tables.scan
    connection.execute(update(scan).where(scan.c.id == scan_id).values(**values))


def _held(group: Sequence[_Member], scan_id: int) -> int:
    """Return how many of the shots a scan held."""
    return sum(member.scan_id == scan_id for member in group)


def _plan_of(group: Sequence[_Member]) -> int | None:
    """Return how many shots were planned, by the newest shot that says so."""
    return next((member.planned for member in reversed(group) if member.planned is not None), None)


def _cut(members: Sequence[_Member], rejoin_us: int) -> list[list[_Member]]:
    """Return the rounds of shots in time order; a double counts for nothing and goes with the shot before it."""
    groups = _cut_single([member for member in members if not member.double], rejoin_us)
    for double in (member for member in members if member.double):
        later = sum(group[0].started_us > double.started_us for group in groups)
        groups = groups or [[]]
        groups[max(len(groups) - later - 1, 0)].append(double)
    for group in groups:
        group.sort(key=_in_time)
    return groups


def _cut_single(members: Sequence[_Member], rejoin_us: int) -> list[list[_Member]]:
    groups: list[list[_Member]] = []
    swept: frozenset[int] = frozenset()
    planned: int | None = None
    for member in members:
        last = groups[-1] if groups else None
        joins = (
            last is not None
            and not last[-1].last
            and (planned is None or len(last) < planned)
            and member.started_us - last[-1].started_us <= rejoin_us
            and _same_sweep(swept, member.swept)
        )
        if joins and last is not None:
            last.append(member)
            swept = swept or member.swept
            planned = planned if member.planned is None else member.planned
        else:
            groups.append([member])
            swept, planned = member.swept, member.planned
    return groups


def _members(connection: Connection, scan_ids: Sequence[int], others: Sequence[int]) -> list[_Member]:
    """Return the shots of scans, and others by id, in time order."""
    shot = tables.shot
    members: list[_Member] = []
    wanted = [
        *(shot.c.scan_id.in_(part) for part in chunks(scan_ids)),
        *(shot.c.id.in_(part) for part in chunks(others)),
    ]
    for own in wanted:
        swept = declared_sweeps(connection, own)
        members += [
            _Member(
                row.id,
                row.started_us,
                frozenset(swept.get(row.id, ())),
                row.scan_id,
                row.planned_shots,
                bool(row.last),
                bool(row.double),
            )
            for row in connection.execute(select(shot, is_double(shot.c.id).label("double")).where(own))
        ]
    return sorted(members, key=_in_time)


def _in_time(member: _Member) -> tuple[int, int]:
    return member.started_us, member.id


def swept_of(connection: Connection, scan_id: int) -> frozenset[int]:
    """Return the parameters that the records of a scan declared swept."""
    return frozenset().union(*declared_sweeps(connection, tables.shot.c.scan_id == scan_id).values())


def move_shots(connection: Connection, scan_id: int | None, shot_ids: Sequence[int]) -> None:
    """Put shots into a scan, or into none."""
    for part in chunks(list(shot_ids)):
        connection.execute(update(tables.shot).where(tables.shot.c.id.in_(part)).values(scan_id=scan_id))


def retire(connection: Connection, scan_id: int, heir: int | None) -> None:
    """Remove a scan if it has lost all its shots; its kept fits and notes go to the scan that has them now."""
    fit, shot = tables.fit, tables.shot
    if connection.execute(select(shot.c.id).where(shot.c.scan_id == scan_id).limit(1)).first() is not None:
        return
    if scan_id in kept_scans(connection):
        return
    has_fits = (
        connection.execute(select(fit.c.id).where(fit.c.scan_id == scan_id).limit(1)).first() is not None
    )
    if heir is None and (has_fits or has_notes(connection, scan_subject(scan_id))):
        return
    if heir is not None:
        connection.execute(update(fit).where(fit.c.scan_id == scan_id).values(scan_id=heir))
        hand_over_notes(connection, scan_id, heir)
    set_axes(connection, scan_id, ())
    connection.execute(delete(tables.scan).where(tables.scan.c.id == scan_id))
