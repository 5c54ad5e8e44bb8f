"""The rounds of a label: one scan as long as its shots come close together and sweep the same, until it is ended."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass, field

from sqlalchemy import Connection, delete, func, select, update

from nightfold import tables
from nightfold.ledger.names import insert_row
from nightfold.ledger.rows import chunks
from nightfold.scans.keeping import set_axes, settle_axes

ALWAYS_SETTLED = 64


@dataclass(slots=True)
class Round:
    """One round of a label as far as it has come."""

    scan_id: int
    round: int
    swept: frozenset[int]
    last_us: int
    shots: int
    planned: int | None = None
    closed_us: int | None = None
    late: bool = False
    settled_at: int = 0
    seen: set[tuple[bytes, frozenset[str]]] = field(default_factory=set)

    def takes(self, started_us: int, swept: Sequence[int], rejoin_us: int) -> bool:
        """Return whether a shot of that time and sweep resumes this round."""
        if started_us < self.last_us:
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


def open_round(
    connection: Connection, sequence_id: int, label: str, number: int, started_us: int, swept: Sequence[int]
) -> Round:
    """Enter a new round of a label."""
    row = {"sequence_id": sequence_id, "label": label, "round": number, "origin": "label"}
    scan_id = insert_row(connection, tables.scan, row)
    set_axes(connection, scan_id, swept)
    return Round(scan_id, number, frozenset(swept), started_us, 0)


def newest_round(connection: Connection, sequence_id: int, label: str) -> Round | None:
    """Return the newest round of a label as it is in the store."""
    scan, shot = tables.scan, tables.shot
    row = connection.execute(
        select(scan)
        .where(scan.c.sequence_id == sequence_id, scan.c.label == label)
        .order_by(scan.c.round.desc())
        .limit(1)
    ).first()
    if row is None:
        return None
    span = select(func.max(shot.c.started_us), func.count()).where(shot.c.scan_id == row.id)
    last, count = connection.execute(span).one()
    swept = _swept_of(connection, row.id)
    return Round(row.id, row.round, swept, last or 0, count, row.planned_shots, row.closed_us)


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

    Parameters
    ----------
    fresh : collection of int
        Ids of the shots that came now: the rounds they are in have their axes looked at again.
    """
    scan = tables.scan
    query = select(scan.c.id).where(scan.c.sequence_id == sequence_id, scan.c.label == label)
    existing = list(connection.execute(query.order_by(scan.c.round)).scalars())
    groups = _cut(_members(connection, existing), rejoin_us)
    free = list(existing)
    chosen: list[int] = []
    for group in groups:  # each round keeps the id most of its shots had
        wanted = max(free, key=lambda scan_id: _held(group, scan_id), default=None)
        if wanted is None or not _held(group, wanted):
            row = {"sequence_id": sequence_id, "label": label, "round": -1 - len(chosen), "origin": "label"}
            wanted = insert_row(connection, scan, row)
        else:
            free.remove(wanted)
        chosen.append(wanted)
    for position, scan_id in enumerate([*chosen, *free]):  # out of each other's way first: rounds are unique
        connection.execute(update(scan).where(scan.c.id == scan_id).values(round=-1000 - position))
    for number, (scan_id, group) in enumerate(zip(chosen, groups, strict=True), 1):
        ends = [member.started_us for member in group if member.last]
        values = {"round": number, "planned_shots": _plan_of(group), "closed_us": max(ends, default=None)}
        connection.execute(update(scan).where(scan.c.id == scan_id).values(**values))
        moved = [member.id for member in group if member.scan_id != scan_id]
        move_shots(connection, scan_id, moved)
    for scan_id in free:
        heir = max(range(len(groups)), key=lambda place: _held(groups[place], scan_id))
        retire(connection, scan_id, chosen[heir])
    for scan_id, group in zip(chosen, groups, strict=True):
        if any(member.scan_id != scan_id or member.id in fresh for member in group):
            settle_axes(connection, scan_id, next((m.swept for m in group if m.swept), frozenset()))


def _held(group: Sequence[_Member], scan_id: int) -> int:
    """Return how many of the shots a scan held."""
    return sum(member.scan_id == scan_id for member in group)


def _plan_of(group: Sequence[_Member]) -> int | None:
    """Return how many shots were planned, by the newest shot that says so."""
    return next((member.planned for member in reversed(group) if member.planned is not None), None)


def _cut(members: Sequence[_Member], rejoin_us: int) -> list[list[_Member]]:
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


def _members(connection: Connection, scan_ids: Sequence[int]) -> list[_Member]:
    """Return the shots of scans, in time order."""
    shot, value = tables.shot, tables.shot_value
    swept: dict[int, set[int]] = {}
    members: list[_Member] = []
    declared = select(value.c.shot_id, value.c.parameter_id).join(shot, shot.c.id == value.c.shot_id)
    for part in chunks(scan_ids):
        for row in connection.execute(declared.where(shot.c.scan_id.in_(part), value.c.swept)):
            swept.setdefault(row.shot_id, set()).add(row.parameter_id)
        members += [
            _Member(
                row.id,
                row.started_us,
                frozenset(swept.get(row.id, ())),
                row.scan_id,
                row.planned_shots,
                bool(row.last),
            )
            for row in connection.execute(select(shot).where(shot.c.scan_id.in_(part)))
        ]
    return sorted(members, key=lambda member: (member.started_us, member.id))


def _swept_of(connection: Connection, scan_id: int) -> frozenset[int]:
    """Return the parameters that the records of a scan declared swept."""
    shot, value = tables.shot, tables.shot_value
    rows = select(value.c.parameter_id).join(shot, shot.c.id == value.c.shot_id)
    return frozenset(
        connection.execute(rows.where(shot.c.scan_id == scan_id, value.c.swept).distinct()).scalars()
    )


def move_shots(connection: Connection, scan_id: int | None, shot_ids: Sequence[int]) -> None:
    """Put shots into a scan, or into none."""
    for part in chunks(list(shot_ids)):
        connection.execute(update(tables.shot).where(tables.shot.c.id.in_(part)).values(scan_id=scan_id))


def retire(connection: Connection, scan_id: int, heir: int | None) -> None:
    """Remove a scan if it has lost all its shots; its kept fits go to the scan that has them now."""
    fit, shot = tables.fit, tables.shot
    if connection.execute(select(shot.c.id).where(shot.c.scan_id == scan_id).limit(1)).first() is not None:
        return
    has_fits = (
        connection.execute(select(fit.c.id).where(fit.c.scan_id == scan_id).limit(1)).first() is not None
    )
    if has_fits and heir is None:
        return
    if has_fits:
        connection.execute(update(fit).where(fit.c.scan_id == scan_id).values(scan_id=heir))
    set_axes(connection, scan_id, ())
    connection.execute(delete(tables.scan).where(tables.scan.c.id == scan_id))
