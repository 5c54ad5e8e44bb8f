"""Reading sensors: which there are, a span of one, and a span in bins."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import TYPE_CHECKING, Any

import numpy as np
from sqlalchemy import Connection, Row, and_, func, select

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import find_machine, moment_us, near_miss
from nightfold.sensors.keeping import Ints, Series
from nightfold.sensors.packing import HOUR_US, unpack
from nightfold.timestamps import utc_times

if TYPE_CHECKING:
    import pandas as pd

Moment = datetime | str | None


@dataclass(frozen=True, slots=True)
class Sensor:
    """One sensor of one machine."""

    id: int
    machine: str
    zone: str
    name: str
    unit: str


def list_sensors(connection: Connection, machine: str | None) -> pd.DataFrame:
    """Return a row a sensor: machine, name, unit, readings, first, last (UTC), newest (the last value).

    Raises
    ------
    NotFound
        If there is no such machine.
    """
    import pandas as pd

    hour = tables.sensor_hour
    sums = (
        select(
            hour.c.sensor_id,
            func.sum(hour.c.n).label("readings"),
            func.min(hour.c.first_us).label("first_us"),
            func.max(hour.c.last_us).label("last_us"),
            func.max(hour.c.hour).label("hour"),
        )
        .group_by(hour.c.sensor_id)
        .subquery()
    )
    query = (
        select(tables.sensor, tables.machine.c.name.label("machine"), sums)
        .join(tables.machine, tables.machine.c.id == tables.sensor.c.machine_id)
        .join(sums, sums.c.sensor_id == tables.sensor.c.id)
    )
    if machine is not None:
        query = query.where(tables.machine.c.id == find_machine(connection, machine).id)
    rows = connection.execute(query.order_by(tables.machine.c.name, tables.sensor.c.name)).all()
    return pd.DataFrame(
        {
            "machine": [row.machine for row in rows],
            "name": [row.name for row in rows],
            "unit": pd.Series([row.unit for row in rows], dtype=object),
            "readings": np.array([row.readings for row in rows], np.int64),
            "first": utc_times(np.array([row.first_us for row in rows], np.int64)),
            "last": utc_times(np.array([row.last_us for row in rows], np.int64)),
            "newest": np.array([_newest(connection, row) for row in rows], np.float64),
        }
    )


def _newest(connection: Connection, row: Row[Any]) -> float:
    """Return the last value of a sensor."""
    hour = tables.sensor_hour
    query = select(hour.c.readings).where(hour.c.sensor_id == row.id, hour.c.hour == row.hour)
    return float(unpack(connection.execute(query).scalar_one())[1][-1])


def find_sensor(connection: Connection, name: str, machine: str | None) -> Sensor:
    """Return a sensor by name.

    Raises
    ------
    NotFound
        If no machine, or not this one, has it.
    ChoiceNeeded
        If several machines have it.
    """
    if machine is not None:
        machine = find_machine(connection, machine).name
    query = select(tables.sensor, tables.machine.c.name.label("machine"), tables.machine.c.zone).join(
        tables.machine, tables.machine.c.id == tables.sensor.c.machine_id
    )
    rows = [row for row in connection.execute(query) if machine is None or row.machine == machine]
    own = [row for row in rows if row.name == name]
    if not own:
        place = "in this store" if machine is None else f"of {machine}"
        raise NotFound(f"sensor {name!r}: not {place}; {near_miss(name, {row.name for row in rows})}")
    if len(own) > 1:
        machines = ", ".join(sorted(row.machine for row in own))
        raise ChoiceNeeded(f"sensor {name!r}: {machines} have one of this name; name the machine")
    (row,) = own
    return Sensor(row.id, row.machine, row.zone, row.name, row.unit or "")


def span_us(sensor: Sensor, since: Moment, until: Moment) -> tuple[int | None, int | None]:
    """Return a span in microseconds; without an offset it is local to the machine.

    Raises
    ------
    NotFound
        If it is no time.
    """
    start, stop = (None if at is None else moment_us(at, sensor.zone) for at in (since, until))
    return start, stop


def read_span(connection: Connection, sensor_id: int, since_us: int | None, until_us: int | None) -> Series:
    """Return the readings of a sensor in order of time; `since_us` is included, `until_us` is not."""
    table, parts = tables.sensor_hour, list[Series]()
    query = select(table.c.hour, table.c.readings).where(in_span(sensor_id, since_us, until_us))
    for hour, packed in connection.execute(query.order_by(table.c.hour)):
        parts.append(_series(hour, packed))
    return _cut(Series.joined(parts), since_us, until_us)


def read_hours(connection: Connection, sensor_id: int, hours: Ints) -> Series:
    """Return the readings of certain hours, rising, in order of time."""
    table, parts = tables.sensor_hour, list[Series]()
    query = select(table.c.hour, table.c.readings).where(table.c.sensor_id == sensor_id)
    for some in chunks(hours.tolist()):
        for hour, packed in connection.execute(query.where(table.c.hour.in_(some)).order_by(table.c.hour)):
            parts.append(_series(hour, packed))
    return Series.joined(parts)


def as_frame(series: Series) -> pd.DataFrame:
    """Return readings as a frame: at (UTC), value."""
    import pandas as pd

    return pd.DataFrame({"at": utc_times(series.at_us), "value": series.values})


def in_span(sensor_id: int, since_us: int | None, until_us: int | None) -> Any:
    """Return the condition that an hour holds readings of a span."""
    table = tables.sensor_hour
    terms = [table.c.sensor_id == sensor_id]
    if since_us is not None:
        terms += [table.c.hour >= since_us // HOUR_US, table.c.last_us >= since_us]
    if until_us is not None:
        terms += [table.c.hour <= (until_us - 1) // HOUR_US, table.c.first_us < until_us]
    return and_(*terms)


def _series(hour: int, packed: bytes) -> Series:
    offsets, values = unpack(packed)
    return Series(offsets.astype(np.int64) + hour * HOUR_US, values)


def _cut(series: Series, since_us: int | None, until_us: int | None) -> Series:
    start = 0 if since_us is None else int(np.searchsorted(series.at_us, since_us))
    stop = len(series.at_us) if until_us is None else int(np.searchsorted(series.at_us, until_us))
    return series.where(slice(start, stop))
