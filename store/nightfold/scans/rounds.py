"""The rounds of a label: one scan as long as its shots come close together and sweep the same, until it is ended."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
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


def fold_label(connection: Connection, sequence_id: int, label: str, rejoin_us: int) -> None:
    """Cut all shots of a label into rounds again, by the time they started, whatever the order they came in."""
    scan = tables.scan
    existing = connection.execute(
        select(scan).where(scan.c.sequence_id == sequence_id, scan.c.label == label).order_by(scan.c.round)
    ).all()
    members = _members(connection, [row.id for row in existing])
    closed = {row.closed_us for row in existing if row.closed_us is not None}
    planned = next((row.planned_shots for row in reversed(existing) if row.planned_shots is not None), None)
    groups = _cut(members, closed, planned, rejoin_us)
    free = [row.id for row in existing]
    chosen: list[int] = []
    for group in groups:  # each round keeps the id most of its shots had
        wanted = max(free, key=lambda scan_id: sum(m.scan_id == scan_id for m in group), default=None)
        if wanted is None or not any(member.scan_id == wanted for member in group):
            row = {"sequence_id": sequence_id, "label": label, "round": -1, "origin": "label"}
            row["round"] = -1 - len(chosen)
            wanted = insert_row(connection, scan, row)
        else:
            free.remove(wanted)
        chosen.append(wanted)
    for position, scan_id in enumerate([*chosen, *free]):  # out of each other's way first: rounds are unique
        connection.execute(update(scan).where(scan.c.id == scan_id).values(round=-1000 - position))
    for number, (scan_id, group) in enumerate(zip(chosen, groups, strict=True), 1):
        ends = [at for at in closed if group[0].started_us <= at <= group[-1].started_us]
        values = {"round": number, "planned_shots": planned, "closed_us": max(ends, default=None)}
        connection.execute(update(scan).where(scan.c.id == scan_id).values(**values))
        move_shots(connection, scan_id, [member.id for member in group if member.scan_id != scan_id])
        settle_axes(connection, scan_id, next((m.swept for m in group if m.swept), frozenset()))
    for scan_id in free:
        retire(connection, scan_id, chosen[0])


def _cut(
    members: Sequence[_Member], closed: set[int], planned: int | None, rejoin_us: int
) -> list[list[_Member]]:
    groups: list[list[_Member]] = []
    swept: frozenset[int] = frozenset()
    for member in members:
        last = groups[-1] if groups else None
        joins = (
            last is not None
            and last[-1].started_us not in closed
            and (planned is None or len(last) < planned)
            and member.started_us - last[-1].started_us <= rejoin_us
            and _same_sweep(swept, member.swept)
        )
        if joins and last is not None:
            last.append(member)
            swept = swept or member.swept
        else:
            groups.append([member])
            swept = member.swept
    return groups


def _members(connection: Connection, scan_ids: Sequence[int]) -> list[_Member]:
    shot, value = tables.shot, tables.shot_value
    swept: dict[int, set[int]] = {}
    of_scans = shot.c.scan_id.in_(scan_ids)
    rows = select(value.c.shot_id, value.c.parameter_id).join(shot, shot.c.id == value.c.shot_id)
    for row in connection.execute(rows.where(of_scans, value.c.swept)):
        swept.setdefault(row.shot_id, set()).add(row.parameter_id)
    shots = (
        select(shot.c.id, shot.c.started_us, shot.c.scan_id)
        .where(of_scans)
        .order_by(shot.c.started_us, shot.c.id)
    )
    return [
        _Member(row.id, row.started_us, frozenset(swept.get(row.id, ())), row.scan_id)
        for row in connection.execute(shots)
    ]


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
