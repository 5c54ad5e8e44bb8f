"""Readings merged into the hours of the store: nothing is lost, nothing is there twice, nothing is overwritten."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, bindparam, insert, select, update

from nightfold import tables
from nightfold.ledger.rows import chunks
from nightfold.sensors.packing import HOUR_US, pack, unpack

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Series:
    """Readings of one sensor.

    Attributes
    ----------
    at_us : (n,) int array, microseconds since 1970
    values : (n,) float array
    """

    at_us: Ints
    values: Floats

    @classmethod
    def joined(cls, parts: Sequence[Series]) -> Series:
        """Return all parts one after another."""
        if not parts:
            return cls(np.empty(0, np.int64), np.empty(0))
        return cls(np.concatenate([part.at_us for part in parts]), np.concatenate([p.values for p in parts]))

    def where(self, chosen: Any) -> Series:
        """Return the readings that a mask, an index or a slice chooses."""
        return Series(self.at_us[chosen], self.values[chosen])


def load_hours(connection: Connection, sensor_id: int, hours: Sequence[int]) -> dict[int, Series]:
    """Return the readings of those hours that are in the store, in order of time, each in order of time."""
    table, found = tables.sensor_hour, dict[int, Series]()
    query = select(table.c.hour, table.c.readings).where(table.c.sensor_id == sensor_id)
    for part in chunks(hours):
        rows = connection.execute(query.where(table.c.hour.in_(part)).order_by(table.c.hour))
        for hour, packed in rows:
            offsets, values = unpack(packed)
            found[hour] = Series(offsets.astype(np.int64) + hour * HOUR_US, values)
    return found


def hours_of(at_us: Ints) -> list[int]:
    """Return the hours that moments fall into, rising."""
    return [int(hour) for hour in np.unique(at_us // HOUR_US)]


def contradicted(stored: Series, fresh: Series) -> tuple[Flags, Flags]:
    """Return which fresh readings the store has already, and which it has with another value.

    Parameters
    ----------
    stored : Series
        In order of time.
    fresh : Series
        In any order.

    Returns
    -------
    known, other : (n,) bool arrays
    """
    if not len(stored.at_us):
        none = np.zeros(len(fresh.at_us), bool)
        return none, none
    place = np.minimum(np.searchsorted(stored.at_us, fresh.at_us), len(stored.at_us) - 1)
    there = stored.at_us[place] == fresh.at_us
    same = equal(stored.values[place], fresh.values)
    return there & same, there & ~same


def equal(one: Floats, other: Floats) -> Flags:
    """Return where values are the same; NaN is the same as NaN."""
    return np.asarray((one == other) | (np.isnan(one) & np.isnan(other)))


def repeated(fresh: Series) -> tuple[Flags, Flags]:
    """Return which readings say again what an earlier one of the same time says, and which say otherwise.

    Of several at one time, the first counts.
    """
    order = np.argsort(fresh.at_us, kind="stable")
    at_us, values = fresh.at_us[order], fresh.values[order]
    first = np.ones(len(order), bool)
    first[1:] = at_us[1:] != at_us[:-1]
    leader = np.flatnonzero(first)[np.cumsum(first) - 1]
    same = equal(values, values[leader])
    again, other = np.empty(len(order), bool), np.empty(len(order), bool)
    again[order], other[order] = ~first & same, ~first & ~same
    return again, other


def keep_readings(
    connection: Connection, sensor_id: int, stored: Mapping[int, Series], fresh: Series
) -> None:
    """Write fresh readings, none of whose times is in the store or there twice, into their hours.

    Parameters
    ----------
    stored : mapping of hour to Series
        What `load_hours` found in the hours of the fresh readings, in this transaction.
    """
    order = np.argsort(fresh.at_us)
    fresh = fresh.where(order)
    hours = fresh.at_us // HOUR_US
    made, changed = list[dict[str, Any]](), list[dict[str, Any]]()
    for hour in hours_of(fresh.at_us):
        start, stop = np.searchsorted(hours, [hour, hour + 1])
        part = fresh.where(slice(start, stop))
        if hour in stored:
            part = Series.joined([stored[hour], part])
            if len(part.at_us) > 1 and part.at_us[-(stop - start) - 1] > part.at_us[-(stop - start)]:
                part = part.where(np.argsort(part.at_us))
        (changed if hour in stored else made).append(_row(sensor_id, hour, part))
    table = tables.sensor_hour
    if made:
        connection.execute(insert(table), made)
    if changed:
        this = (table.c.sensor_id == bindparam("in_sensor")) & (table.c.hour == bindparam("in_hour"))
        names = {"sensor_id": "in_sensor", "hour": "in_hour"}
        rows = [{names.get(key, key): value for key, value in row.items()} for row in changed]
        connection.execute(update(table).where(this), rows)


def _row(sensor_id: int, hour: int, part: Series) -> dict[str, Any]:
    """Return the row of one hour."""
    offsets = (part.at_us - hour * HOUR_US).astype(np.uint32)
    return {
        "sensor_id": sensor_id,
        "hour": hour,
        "n": len(offsets),
        "first_us": int(part.at_us[0]),
        "last_us": int(part.at_us[-1]),
        "readings": pack(offsets, part.values),
    }
