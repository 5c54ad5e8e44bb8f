"""The edit history: which parameters a person changed, and when.

Per stream the resting value of every parameter is followed through time: a value set is looked at only where it differs
from the one before, and a moved value only where it was neither declared swept nor an axis of the shot's scan. The same
change seen in several sequences is one edit. What changes at more than 6 shots in a row is a reading among the
parameters (a counter, a thermometer), not a person's doing.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, and_, select

from nightfold import tables
from nightfold.ledger.deriving import swept_inputs
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import find_machine, moment_us
from nightfold.settings import plain_value, token_of

Stored = tuple[float | None, str | None]
LONGEST_TUNING = 6


@dataclass(frozen=True, slots=True)
class Edit:
    """One change by hand: the first shot that shows it, the parameter, its value before and after."""

    at_us: int
    parameter: str
    unit: str
    old: Any
    new: Any
    machine: str
    sequence: str


@dataclass(frozen=True, slots=True)
class _Change:
    """A resting value that differs from the one before, at the shot of that place in the stream."""

    place: int
    at_us: int
    parameter_id: int
    old: Stored
    new: Stored


@dataclass(frozen=True, slots=True)
class _Parameter:
    name: str
    kind: str
    unit: str


def find_edits(
    connection: Connection,
    since: datetime | str | None = None,
    until: datetime | str | None = None,
    machine: str | None = None,
) -> list[Edit]:
    """Return the edits of all machines, or of one, in time order.

    Raises
    ------
    NotFound
        If the machine is not in the store.
    """
    machines: list[Row[Any]] = list(connection.execute(select(tables.machine)))
    edits: list[Edit] = []
    for row in machines if machine is None else [find_machine(connection, machine)]:
        low = moment_us(since, row.zone) if since is not None else None
        high = moment_us(until, row.zone) if until is not None else None
        for edit in _edits_of(connection, row.id, row.name):
            if (low is None or edit.at_us >= low) and (high is None or edit.at_us < high):
                edits.append(edit)
    return sorted(edits, key=_order)


def changes_by_hand(
    connection: Connection, sequence_id: int, parameter_ids: Collection[int]
) -> list[tuple[int, int]]:
    """Return parameter id and time of every change by hand of these parameters within one sequence."""
    table = tables.parameter
    query = select(table).where(table.c.id.in_(parameter_ids))
    known = {row.id: _Parameter(row.name, row.kind, row.unit or "") for row in connection.execute(query)}
    changes = _by_hand(_walk(connection, sequence_id, known, tuple(known)))
    return [(change.parameter_id, change.at_us) for change in changes]


def _order(edit: Edit) -> tuple[int, str, str, str]:
    return edit.at_us, edit.machine, edit.parameter, edit.sequence


def _edits_of(connection: Connection, machine_id: int, machine: str) -> list[Edit]:
    table = tables.parameter
    query = select(table).where(table.c.machine_id == machine_id)
    known = {row.id: _Parameter(row.name, row.kind, row.unit or "") for row in connection.execute(query)}
    sequences = select(tables.sequence.c.id, tables.sequence.c.name).where(
        tables.sequence.c.machine_id == machine_id
    )
    seen: list[Edit] = []
    for row in connection.execute(sequences).all():
        for change in _by_hand(_walk(connection, row.id, known)):
            parameter = known[change.parameter_id]
            before, after = (plain_value(parameter.kind, *value) for value in (change.old, change.new))
            seen.append(Edit(change.at_us, parameter.name, parameter.unit, before, after, machine, row.name))
    return _merge(seen)


def _by_hand(changes: Iterable[_Change]) -> list[_Change]:
    """Leave out what changes shot after shot: nobody turns a knob every ten seconds, but a counter or a sensor does."""
    by_parameter: dict[int, list[_Change]] = {}
    for change in changes:
        by_parameter.setdefault(change.parameter_id, []).append(change)
    return [
        change
        for own in by_parameter.values()
        for run in _runs(own)
        if len(run) <= LONGEST_TUNING
        for change in run
    ]


def _runs(changes: Sequence[_Change]) -> Iterator[list[_Change]]:
    """Yield the changes of one parameter in runs at consecutive shots."""
    run: list[_Change] = []
    for change in changes:
        if run and change.place != run[-1].place + 1:
            yield run
            run = []
        run.append(change)
    yield run


def _walk(
    connection: Connection,
    sequence_id: int,
    known: Mapping[int, _Parameter],
    wanted: Collection[int] | None = None,
) -> Iterator[_Change]:
    """Yield every change of a resting value of the stream, in time order: of all parameters, or of those wanted."""
    shot = tables.shot
    contents: dict[int, dict[int, Stored]] = {}
    resting: dict[int, Stored] = {}
    looked_at = None
    moved = _unswept_rows(connection, sequence_id, wanted)
    query = select(shot.c.id, shot.c.started_us, shot.c.set_id).where(shot.c.sequence_id == sequence_id)
    rows = connection.execute(query.order_by(shot.c.started_us, shot.c.id)).all()
    sets = sorted({row.set_id for row in rows})
    axes = _axes_by_set(connection, sequence_id)
    for shot_id, behind in swept_inputs(connection, sequence_id).items():  # a derived parameter was swept
        axes[shot_id] = axes.get(shot_id, frozenset()) | behind
    for part in chunks(sets):
        rest = tables.set_value
        of_sets = select(rest).where(rest.c.set_id.in_(part))
        if wanted is not None:
            of_sets = of_sets.where(rest.c.parameter_id.in_(wanted))
        for row in connection.execute(of_sets):
            contents.setdefault(row.set_id, {})[row.parameter_id] = (row.num, row.exact)
    for place, row in enumerate(rows):
        values = moved.get(row.id, {})
        skip = axes.get(row.id, frozenset())
        values = {key: value for key, value in values.items() if key not in skip}
        if (
            row.set_id,
            skip,
        ) != looked_at:  # a value at rest may be a scan's point, and stay when the scan is over
            values = {
                **{key: val for key, val in contents.get(row.set_id, {}).items() if key not in skip},
                **values,
            }
            looked_at = (row.set_id, skip)
        for parameter_id, value in values.items():
            old = resting.get(parameter_id)
            if old is not None and _token(known[parameter_id], old) != _token(known[parameter_id], value):
                yield _Change(place, row.started_us, parameter_id, old, value)
            resting[parameter_id] = value


def _token(parameter: _Parameter, value: Stored) -> str:
    return token_of(parameter.kind, *value)


def _unswept_rows(
    connection: Connection, sequence_id: int, wanted: Collection[int] | None
) -> dict[int, dict[int, Stored]]:
    shot, value, axis = tables.shot, tables.shot_value, tables.scan_axis
    is_axis = and_(axis.c.scan_id == shot.c.scan_id, axis.c.parameter_id == value.c.parameter_id)
    query = (
        select(value.c.shot_id, value.c.parameter_id, value.c.num, value.c.exact)
        .join(shot, shot.c.id == value.c.shot_id)
        .outerjoin(axis, is_axis)
        .where(shot.c.sequence_id == sequence_id, ~value.c.swept, axis.c.scan_id.is_(None))
    )
    if wanted is not None:
        query = query.where(value.c.parameter_id.in_(wanted))
    found: dict[int, dict[int, Stored]] = {}
    for row in connection.execute(query):
        found.setdefault(row.shot_id, {})[row.parameter_id] = (row.num, row.exact)
    return found


def _axes_by_set(connection: Connection, sequence_id: int) -> dict[int, frozenset[int]]:
    """Return the axes of the scan of every shot, by shot: a value that rests in a set may still be a scan's point."""
    shot, axis = tables.shot, tables.scan_axis
    of_scan: dict[int, set[int]] = {}
    for row in connection.execute(select(axis)):
        of_scan.setdefault(row.scan_id, set()).add(row.parameter_id)
    frozen = {scan_id: frozenset(ids) for scan_id, ids in of_scan.items()}
    query = select(shot.c.id, shot.c.scan_id).where(
        shot.c.sequence_id == sequence_id, shot.c.scan_id.isnot(None)
    )
    return {row.id: frozen.get(row.scan_id, frozenset()) for row in connection.execute(query)}


def _merge(seen: list[Edit]) -> list[Edit]:
    """Make one edit of the same change seen in several sequences, unless the value went elsewhere in between."""
    merged: list[Edit] = []
    last: dict[str, list[Edit]] = {}
    for edit in sorted(seen, key=_order):
        recent = last.setdefault(edit.parameter, [])
        twin = next((e for e in recent if _same(e, edit)), None)
        if twin is not None and edit.sequence != twin.sequence:
            continue
        merged.append(edit)
        last[edit.parameter] = [edit] if not recent or not _same(recent[0], edit) else [*recent, edit]
    return merged


def _same(one: Edit, other: Edit) -> bool:
    return (repr(one.old), repr(one.new)) == (repr(other.old), repr(other.new))
