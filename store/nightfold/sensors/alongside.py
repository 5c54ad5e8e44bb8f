"""Sensors beside shots: a column a sensor in a table of shots, read at the shot or averaged over it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Row, Select, select

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.selecting import Selection, column_name, conditions, find_named
from nightfold.ledger.sequences import shot_durations
from nightfold.sensors.aligning import Floats, Ints, ends_of_shots, mean_over, nearest, typical_interval
from nightfold.sensors.packing import HOUR_US
from nightfold.sensors.reading import read_hours

if TYPE_CHECKING:
    import pandas as pd

Align = Literal["nearest", "mean"]
LEAST_LIMIT_US = 60_000_000
LIMIT_INTERVALS = 10
_AROUND = 20
_AT_ONCE = 500  # hours held in memory: 1.8 million readings of a sensor that is read once a second


def add_sensors(
    connection: Connection, table: pd.DataFrame, selection: Selection, names: Sequence[str], align: str
) -> None:
    """Add a column a sensor to a table of shots, and its unit to ``attrs["units"]``.

    Parameters
    ----------
    connection : Connection
        In the transaction in which the table was read.
    table : DataFrame
        A row a shot of `selection`, in time order.
    selection : Selection
    names : sequence of str
    align : {'nearest', 'mean'}
        The reading nearest to the start of the shot, or the mean over the shot (docs/sensors.md).

    Raises
    ------
    NotFound
        If there is no such sensor, or no such way to align.
    ChoiceNeeded
        If a column of that name is there already, or the unit differs between machines.
    """
    if align not in ("nearest", "mean"):
        raise NotFound(f"align {align!r}: wanted 'nearest' or 'mean'")
    for name in names:
        if column_name(name) in table:
            raise ChoiceNeeded(
                f"column {name!r}: two things have this name; ask for them one after the other"
            )
    wanted = find_named(connection, tables.sensor, names, selection.machine)
    shots = _shots(connection, selection)
    machines = _machines(connection)
    units = dict(table.attrs.get("units", {}))
    for sensor in wanted:
        column = np.full(len(shots), np.nan)
        for sensor_id in sensor.ids:
            own = np.array([shot.machine_id == machines[sensor_id] for shot in shots], bool)
            if own.any():
                rows = [shots[k] for k in np.flatnonzero(own)]
                column[own] = _aligned(connection, sensor_id, machines[sensor_id], rows, align)
        table[column_name(sensor.name)] = column
        units[sensor.name] = sensor.unit
    table.attrs["units"] = units


def _shots(connection: Connection, selection: Selection) -> list[Row[Any]]:
    """Return the shots of a selection in time order: id, started_us, set_id, machine_id."""
    shot, sequence = tables.shot, tables.sequence
    query: Select[Any] = (
        select(shot.c.id, shot.c.started_us, shot.c.set_id, sequence.c.machine_id)
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .where(conditions(connection, selection))
    )
    if selection.limit is None:
        return list(connection.execute(query.order_by(shot.c.started_us, shot.c.id)))
    newest = query.order_by(shot.c.started_us.desc(), shot.c.id.desc()).limit(selection.limit)
    return list(connection.execute(newest))[::-1]


def _machines(connection: Connection) -> dict[int, int]:
    """Return the machine of every sensor."""
    table = tables.sensor
    return {row.id: row.machine_id for row in connection.execute(select(table.c.id, table.c.machine_id))}


def _aligned(
    connection: Connection, sensor_id: int, machine_id: int, shots: Sequence[Row[Any]], align: str
) -> Floats:
    """Return what a sensor showed at each shot of its machine."""
    starts = np.array([shot.started_us for shot in shots], np.int64)
    hours = _Hours(connection, sensor_id)
    values = np.full(len(starts), np.nan)
    if align == "nearest":
        limit = hours.limit_us
        for some, (at_us, read) in hours.around(starts - limit, starts + limit):
            values[some] = nearest(at_us, read, starts[some], limit)
        return values
    durations = shot_durations(connection, shots) * 1e6
    ends, known = ends_of_shots(starts, durations, _neighbours(connection, machine_id, starts), _AROUND)
    for some, (at_us, read) in hours.around(starts, ends):
        values[some] = mean_over(at_us, read, starts[some], ends[some])
    values[~known] = np.nan
    return values


class _Hours:
    """The hours of one sensor, of which only those needed are unpacked, some at a time."""

    def __init__(self, connection: Connection, sensor_id: int) -> None:
        table = tables.sensor_hour
        query = select(table.c.hour, table.c.n, table.c.first_us, table.c.last_us)
        rows = connection.execute(query.where(table.c.sensor_id == sensor_id).order_by(table.c.hour)).all()
        whole = np.array([tuple(row) for row in rows], np.int64).reshape(-1, 4)
        self._connection, self._sensor_id = connection, sensor_id
        self._hours, *self._intervals = whole.T

    @property
    def limit_us(self) -> int:
        """How far from a moment a reading still tells of it."""
        interval = typical_interval(*self._intervals)
        if np.isnan(interval):
            return LEAST_LIMIT_US
        return max(LEAST_LIMIT_US, round(LIMIT_INTERVALS * interval))

    def around(
        self, starts_us: Ints, ends_us: Ints
    ) -> Iterator[tuple[NDArray[np.intp], tuple[Ints, Floats]]]:
        """Yield groups of intervals, as indices, and all readings in the hours that they touch."""
        first, last = starts_us // HOUR_US, ends_us // HOUR_US
        order = np.argsort(first, kind="stable")
        begin = 0
        while begin < len(order):
            stop = int(np.searchsorted(first[order], first[order[begin]] + _AT_ONCE))
            some = order[begin:stop]
            series = read_hours(self._connection, self._sensor_id, self._touched(first[some], last[some]))
            yield some, (series.at_us, series.values)
            begin = stop

    def _touched(self, first: Ints, last: Ints) -> Ints:
        """Return the hours there are that lie in any of the ranges."""
        edges = np.zeros(len(self._hours) + 1, np.int64)
        np.add.at(edges, np.searchsorted(self._hours, first), 1)
        np.add.at(edges, np.searchsorted(self._hours, last, side="right"), -1)
        return self._hours[np.cumsum(edges)[:-1] > 0]


def _neighbours(connection: Connection, machine_id: int, starts: Ints) -> Ints:
    """Return the starts of the machine's shots from some before the first of these to some after the last."""
    shot, sequence = tables.shot, tables.sequence
    of_machine = select(sequence.c.id).where(sequence.c.machine_id == machine_id)
    query = select(shot.c.started_us).where(shot.c.sequence_id.in_(of_machine))
    first, last = int(starts.min()), int(starts.max())
    before = query.where(shot.c.started_us < first).order_by(shot.c.started_us.desc()).limit(_AROUND)
    within = query.where(shot.c.started_us.between(first, last)).order_by(shot.c.started_us)
    after = query.where(shot.c.started_us > last).order_by(shot.c.started_us).limit(_AROUND + 1)
    parts = [connection.execute(part).scalars().all() for part in (before, within, after)]
    return np.array([*reversed(parts[0]), *parts[1], *parts[2]], np.int64)
