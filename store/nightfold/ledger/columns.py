"""Settings and readings of many shots, a column each."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import ColumnElement, Connection, Row, Select, select

from nightfold import tables
from nightfold.ledger.rows import chunks
from nightfold.settings import plain_value

if TYPE_CHECKING:
    from nightfold.formulas.definitions import Derived

_PART = 10_000


@dataclass(frozen=True, slots=True)
class Named:
    """A parameter or observable by name: its ids (one a machine), kind and unit; if derived, what it is made of."""

    name: str
    ids: tuple[int, ...]
    kind: str
    unit: str
    made_of: MadeOf | None = None


@dataclass(frozen=True, slots=True)
class MadeOf:
    """What a derived quantity is computed of: its formulas, and the recorded settings and readings that go in."""

    derived: Derived
    settings: tuple[Named, ...]
    readings: tuple[Named, ...]


def setting_columns(
    connection: Connection,
    rows: Sequence[Row[Any]],
    wanted: Sequence[Named],
    where: ColumnElement[bool] | None,
) -> dict[str, Any]:
    """Return one column a parameter: float64, or object where text, truth or large whole numbers stand.

    Parameters
    ----------
    rows : sequence of rows
        The shots, with ``id`` and ``set_id``.
    where : condition, optional
        What chose the shots; without it they are asked for by their ids.
    """
    recorded = _recorded_settings(connection, rows, _with_inputs(wanted, "settings"), where)
    return {
        item.name: recorded[item.name] if item.made_of is None else _derive(item.made_of, recorded, {})[0]
        for item in wanted
    }


def _with_inputs(wanted: Sequence[Named], part: str) -> list[Named]:
    """Return the recorded ones among the names, and what the derived ones are made of, each name once."""
    found = {item.name: item for item in wanted if item.made_of is None}
    for item in wanted:
        if item.made_of is not None:
            found |= {each.name: each for each in getattr(item.made_of, part)}
    return list(found.values())


def _derive(
    made_of: MadeOf, settings: dict[str, Any], readings: dict[str, tuple[Any, Any]]
) -> tuple[Any, Any]:
    """Return values and standard uncertainties of a derived quantity."""
    from nightfold.formulas.evaluation import evaluate

    derived = made_of.derived
    exact = {each.name: _floats(settings[each.name]) for each in made_of.settings}
    uncertain = {each.name: readings[each.name] for each in made_of.readings}
    return evaluate(derived.formulas, [derived.name], exact, uncertain)[derived.name]


def _floats(column: Any) -> Any:
    import numpy as np

    if column.dtype != object:
        return column
    return np.array([math.nan if value is None else value for value in column], dtype=np.float64)


def _recorded_settings(
    connection: Connection,
    rows: Sequence[Row[Any]],
    wanted: Sequence[Named],
    where: ColumnElement[bool] | None,
) -> dict[str, Any]:
    if not wanted:
        return {}
    kinds = {number: item.kind for item in wanted for number in item.ids}
    move, rest = tables.shot_value, tables.set_value
    moving: dict[int, dict[int, Any]] = {number: {} for number in kinds}
    of_shots = select(move.c.shot_id, move.c.parameter_id, move.c.num, move.c.exact)
    query = of_shots.where(move.c.parameter_id.in_(kinds))
    for shot_id, number, num, exact in _rows_of(connection, query, move.c.shot_id, rows, where):
        moving[number][shot_id] = plain_value(kinds[number], num, exact)
    resting: dict[int, dict[int, Any]] = {number: {} for number in kinds}
    of_sets = select(rest.c.set_id, rest.c.parameter_id, rest.c.num, rest.c.exact)
    query = of_sets.where(rest.c.parameter_id.in_(kinds))
    for part in chunks(sorted({row.set_id for row in rows})):
        for set_id, number, num, exact in connection.execute(query.where(rest.c.set_id.in_(part))).all():
            resting[number][set_id] = plain_value(kinds[number], num, exact)
    keys = [(row.id, row.set_id) for row in rows]
    return {item.name: _column(_merged(keys, item, moving, resting), item.kind) for item in wanted}


def _merged(
    keys: Sequence[tuple[int, int]],
    item: Named,
    moving: dict[int, dict[int, Any]],
    resting: dict[int, dict[int, Any]],
) -> list[Any]:
    """Return a parameter's value at every shot: what moved with it, else what rests in its set, else None."""
    values: list[Any] = [None] * len(keys)
    for number in item.ids:
        moved, rested = moving[number], resting[number]
        for place, (shot_id, set_id) in enumerate(keys):
            value = moved.get(shot_id, rested.get(set_id))
            if value is not None:
                values[place] = value
    return values


def reading_columns(
    connection: Connection,
    rows: Sequence[Row[Any]],
    wanted: Sequence[Named],
    where: ColumnElement[bool] | None,
) -> dict[str, tuple[Any, Any]]:
    """Return values and standard uncertainties of each observable, NaN where there is none.

    Parameters
    ----------
    rows, where
        As in `setting_columns`.
    """
    made = [item.made_of for item in wanted if item.made_of is not None]
    inputs = {each.name: each for made_of in made for each in made_of.settings}
    settings = _recorded_settings(connection, rows, list(inputs.values()), where)
    recorded = _recorded_readings(connection, rows, _with_inputs(wanted, "readings"), where)
    return {
        item.name: recorded[item.name] if item.made_of is None else _derive(item.made_of, settings, recorded)
        for item in wanted
    }


def _recorded_readings(
    connection: Connection,
    rows: Sequence[Row[Any]],
    wanted: Sequence[Named],
    where: ColumnElement[bool] | None,
) -> dict[str, tuple[Any, Any]]:
    import numpy as np

    if not wanted:
        return {}
    place = {row.id: index for index, row in enumerate(rows)}
    columns = {item.name: ([math.nan] * len(rows), [math.nan] * len(rows)) for item in wanted}
    of_id = {number: columns[item.name] for item in wanted for number in item.ids}
    table = tables.reading
    query = select(table.c.shot_id, table.c.observable_id, table.c.value, table.c.stderr, table.c.state)
    query = query.where(table.c.observable_id.in_(of_id))
    for shot_id, number, value, stderr, state in _rows_of(connection, query, table.c.shot_id, rows, where):
        values, stderrs = of_id[number]
        values[place[shot_id]] = read_value(value, state)
        if stderr is not None:
            stderrs[place[shot_id]] = stderr
    return {name: (np.array(values), np.array(stderrs)) for name, (values, stderrs) in columns.items()}


def read_value(value: float | None, state: str | None) -> float:
    """Return a stored reading as a float."""
    if value is not None:
        return value
    return float(state) if state in ("inf", "-inf") else math.nan


def _rows_of(
    connection: Connection,
    query: Select[Any],
    shot_id: ColumnElement[int],
    rows: Sequence[Row[Any]],
    where: ColumnElement[bool] | None,
) -> Iterator[Any]:
    """Yield the rows that hang on shots."""
    if where is not None:
        found = connection.execute(query.join(tables.shot, tables.shot.c.id == shot_id).where(where))
        for part in found.partitions(_PART):
            yield from part
        return
    for ids in chunks([row.id for row in rows]):
        yield from connection.execute(query.where(shot_id.in_(ids))).all()


def _column(values: list[Any], kind: str) -> Any:
    import numpy as np

    if kind == "number" and not any(type(value) is int for value in values):
        return np.array([math.nan if value is None else value for value in values], dtype=np.float64)
    column = np.empty(len(values), dtype=object)
    column[:] = values
    return column
