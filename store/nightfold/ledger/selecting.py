"""Choosing shots and reading their settings and readings as a table."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date, datetime, time
from typing import TYPE_CHECKING, Any

from sqlalchemy import ColumnElement, Connection, Row, Select, Table, and_, exists, select

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.columns import Named, reading_columns, setting_columns
from nightfold.ledger.deriving import Makings
from nightfold.timestamps import parse_moment, to_us, utc_times

if TYPE_CHECKING:
    import pandas as pd

_STDERR = "_stderr"
DOUBLE = "double"
"""The rule by which a shot is set aside that is there a second time, taken under another name of its machine."""

_COLUMNS = ("uid", "started", "sequence", "scan")
_OWN_COLUMNS = {"uid", "shot_id", "started", "sequence", "scan", "set_aside"}


@dataclass(frozen=True, slots=True)
class Selection:
    """Which shots: every field that is given narrows the choice.

    Attributes
    ----------
    machine, sequence : str or None
    scan_id : int or None
    since, until : datetime or str or None
        From (included) and to (excluded); ISO 8601 with an offset, an aware datetime, or local time of the machine.
    set_aside : bool
        Include the shots set aside.
    limit : int or None
        Only the newest so many.
    """

    machine: str | None = None
    sequence: str | None = None
    scan_id: int | None = None
    since: datetime | str | None = None
    until: datetime | str | None = None
    set_aside: bool = False
    limit: int | None = None


def column_name(name: str) -> str:
    """Return the column of a setting or reading in a table of shots: its name, with ``_`` if it is the shot's own."""
    return f"{name}_" if name in _OWN_COLUMNS else name


def listed(names: Sequence[str]) -> tuple[str, ...]:
    """Return names in their order, each once; one name alone is a list of one."""
    return (names,) if isinstance(names, str) else tuple(dict.fromkeys(names))


def moment_us(value: datetime | str, zone: str) -> int:
    """Return a time as microseconds since 1970; without an offset it is read in `zone`, a date is its first moment.

    Raises
    ------
    NotFound
        If it is no time.
    """
    from nightfold.timestamps import find_zone

    where = find_zone(zone)
    try:
        if isinstance(value, str) and len(value) == 10:
            return to_us(datetime.combine(date.fromisoformat(value), time(), where))
        return parse_moment(value, where)
    except ValueError as problem:
        raise NotFound(f"time {value!r}: wanted {problem}") from None


def find_machine(connection: Connection, name: str) -> Row[Any]:
    """Return the row of a machine, by its name or by one that was merged into it.

    Raises
    ------
    NotFound
    """
    rows = {row.name: row for row in connection.execute(select(tables.machine))}
    if name not in rows:
        alias = tables.machine_alias
        meant = connection.execute(select(alias.c.machine_id).where(alias.c.name == name)).scalar()
        for row in rows.values():
            if row.id == meant:
                return row
        raise NotFound(f"machine {name!r}: not in this store; {near_miss(name, rows)}")
    return rows[name]


def the_machine(connection: Connection, name: str | None) -> Row[Any]:
    """Return the row of a machine, or without a name of the only one there is.

    Raises
    ------
    NotFound, ChoiceNeeded
    """
    if name is not None:
        return find_machine(connection, name)
    rows = list(connection.execute(select(tables.machine).order_by(tables.machine.c.name)))
    if not rows:
        raise NotFound("machine: none is in this store yet; take shots or use a machine card first")
    if len(rows) > 1:
        raise ChoiceNeeded(f"machine: there are {', '.join(row.name for row in rows)}; name one")
    return rows[0]


def near_miss(name: str, known: Iterable[str]) -> str:
    """Return what to say about the names there are, near ones first."""
    names = list(known)
    near = difflib.get_close_matches(name, names, 3, 0.5) or sorted(names)[:8]
    return "it has " + ", ".join(near) if near else "it has none yet"


def set_aside_now(shot_id: ColumnElement[int]) -> ColumnElement[bool]:
    """Return the condition that a shot is set aside at present."""
    table = tables.set_aside
    return exists().where(table.c.shot_id == shot_id, table.c.lifted_us.is_(None))


def is_double(shot_id: ColumnElement[int]) -> ColumnElement[bool]:
    """Return the condition that a shot is set aside because it is there a second time, by the rule `DOUBLE`."""
    table = tables.set_aside
    return exists().where(table.c.shot_id == shot_id, table.c.rule == DOUBLE, table.c.lifted_us.is_(None))


def conditions(connection: Connection, selection: Selection) -> ColumnElement[bool]:
    """Return the selection as a condition on the shot table.

    Raises
    ------
    NotFound
        If the machine or sequence is not in the store.
    """
    shot, sequence = tables.shot, tables.sequence
    terms: list[ColumnElement[bool]] = []
    zone = "UTC"
    if selection.machine is not None:
        row = find_machine(connection, selection.machine)
        zone = row.zone
        of_machine = select(sequence.c.id).where(sequence.c.machine_id == row.id)
        terms.append(shot.c.sequence_id.in_(of_machine))
    else:
        zones = set(connection.execute(select(tables.machine.c.zone)).scalars())
        zone = zones.pop() if len(zones) == 1 else "UTC"
    if selection.sequence is not None:
        found = {row.id: row.name for row in connection.execute(select(sequence.c.id, sequence.c.name))}
        ids = [key for key, name in found.items() if name == selection.sequence]
        if not ids:
            known = near_miss(selection.sequence, set(found.values()))
            raise NotFound(f"sequence {selection.sequence!r}: not in this store; {known}")
        terms.append(shot.c.sequence_id.in_(ids))
    if selection.scan_id is not None:
        terms.append(shot.c.scan_id == selection.scan_id)
    if selection.since is not None:
        terms.append(shot.c.started_us >= moment_us(selection.since, zone))
    if selection.until is not None:
        terms.append(shot.c.started_us < moment_us(selection.until, zone))
    if not selection.set_aside:
        terms.append(~set_aside_now(shot.c.id))
    return and_(*terms) if terms else shot.c.id.isnot(None)


def find_named(
    connection: Connection, table: Table, names: Sequence[str], machine: str | None
) -> list[Named]:
    """Return parameters or observables by name.

    Raises
    ------
    NotFound
        If the machine has none of that name.
    ChoiceNeeded
        If several machines have it in different units or kinds, or do not derive it alike.
    """
    makings = Makings(connection)
    query = select(table, tables.machine.c.name.label("machine")).join(
        tables.machine, tables.machine.c.id == table.c.machine_id
    )
    if machine is not None:
        query = query.where(tables.machine.c.id == find_machine(connection, machine).id)
    rows = list(connection.execute(query))
    found = []
    for name in names:
        own = [row for row in rows if row.name == name]
        if not own:
            known = sorted({row.name for row in rows})
            raise NotFound(f"{table.name} {name!r}: not in this store; {near_miss(name, known)}")
        kinds = {(getattr(row, "kind", "number"), row.unit or "") for row in own}
        if len(kinds) > 1:
            machines = ", ".join(sorted(row.machine for row in own))
            raise ChoiceNeeded(
                f"{table.name} {name!r}: differs in kind or unit between {machines}; name the machine"
            )
        kind, unit = kinds.pop()
        made_of = makings.of(name, [row.machine_id for row in own])
        found.append(Named(name, tuple(row.id for row in own), kind, unit, made_of))
    return found


def named_by_id(connection: Connection, table: Table, ids: Iterable[int]) -> list[Named]:
    """Return parameters or observables of one machine by id, in order."""
    rows = {row.id: row for row in connection.execute(select(table).where(table.c.id.in_(list(ids))))}
    makings = Makings(connection)
    return [
        Named(
            rows[n].name,
            (n,),
            getattr(rows[n], "kind", "number"),
            rows[n].unit or "",
            makings.of(rows[n].name, [rows[n].machine_id]),
        )
        for n in ids
    ]


def select_shots(
    connection: Connection, selection: Selection
) -> tuple[list[Row[Any]], ColumnElement[bool] | None]:
    """Return the shots chosen, in time order, and the condition that chose them (None for the newest few)."""
    shot, sequence, scan = tables.shot, tables.sequence, tables.scan
    where = conditions(connection, selection)
    query: Select[Any] = (
        select(
            shot.c.id, shot.c.uid, shot.c.started_us, shot.c.set_id, shot.c.reference, shot.c.scan_id,
            sequence.c.name.label("sequence"), scan.c.label, scan.c.round,
        )
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .outerjoin(scan, scan.c.id == shot.c.scan_id)
        .where(where)
    )  # fmt: skip
    if selection.limit is None:
        return list(connection.execute(query.order_by(shot.c.started_us, shot.c.id)).all()), where
    newest = query.order_by(shot.c.started_us.desc(), shot.c.id.desc()).limit(selection.limit)
    return list(connection.execute(newest).all())[::-1], None


def scan_key(scan_id: int | None, label: str | None, number: int | None) -> str | None:
    """Return how a scan is named: ``label#round``, or its id where it has no label."""
    if scan_id is None:
        return None
    return str(scan_id) if label is None else f"{label}#{number}"


def read_table(
    connection: Connection, selection: Selection, parameters: Sequence[str], observables: Sequence[str]
) -> pd.DataFrame:
    """Return a frame with a row a shot: uid, started (UTC), sequence, scan, then what was asked for.

    Units stand in ``attrs["units"]``.

    Raises
    ------
    NotFound
        If something asked for is not in the store.
    ChoiceNeeded
        If one column would have to show two things.
    """
    import numpy as np
    import pandas as pd

    for name in (*parameters, *observables):
        if name in _COLUMNS or (name in parameters and name in observables):
            raise ChoiceNeeded(f"column {name!r}: two things have this name; read one shot at a time for it")
    rows, where = select_shots(connection, selection)
    wanted = find_named(connection, tables.parameter, parameters, selection.machine)
    plain, errors = _split_stderr(connection, observables, selection.machine)
    read = find_named(connection, tables.observable, plain + errors, selection.machine)
    frame = pd.DataFrame(
        {
            "uid": [row.uid for row in rows],
            "started": utc_times(np.array([row.started_us for row in rows], dtype=np.int64)),
            "sequence": [row.sequence for row in rows],
            "scan": [scan_key(row.scan_id, row.label, row.round) for row in rows],
        }
    )
    columns = setting_columns(connection, rows, wanted, where)
    values = reading_columns(connection, rows, read, where)
    for name in parameters:
        frame[column_name(name)] = columns[name]
    for name in observables:
        base = name.removesuffix(_STDERR) if name not in values else name
        frame[column_name(name)] = values[base][0 if name == base else 1]
    frame.attrs["units"] = {item.name: item.unit for item in [*wanted, *read]}
    return frame


def _split_stderr(
    connection: Connection, names: Sequence[str], machine: str | None
) -> tuple[list[str], list[str]]:
    known = set(connection.execute(select(tables.observable.c.name)).scalars())
    errors = [n.removesuffix(_STDERR) for n in names if n.endswith(_STDERR) and n not in known]
    plain = [n for n in names if n in known or not n.endswith(_STDERR)]
    return plain, [name for name in dict.fromkeys(errors) if name not in plain]
