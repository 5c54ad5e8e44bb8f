"""A span of a sensor in bins of time: lowest, mean and highest, read off the heads of the hours where that will do."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import count
from typing import TYPE_CHECKING

import numpy as np
from sqlalchemy import Connection, func, select

from nightfold import tables
from nightfold.sensors.keeping import Floats, Ints
from nightfold.sensors.packing import HEAD_BYTES, HOUR_US, read_head
from nightfold.sensors.reading import in_span, read_span
from nightfold.timestamps import utc_times

if TYPE_CHECKING:
    import pandas as pd

SECOND_US = 1_000_000


@dataclass(frozen=True, slots=True)
class Bins:
    """Readings of a sensor in bins of time, those without any left out.

    Attributes
    ----------
    at_us : (bins,) int array
        When each begins.
    width_us : int
    counts : (bins,) int array
        Readings, those that are not finite among them.
    low, mean, high : (bins,) float arrays
        Of the finite ones; NaN where there are none.
    """

    at_us: Ints
    width_us: int
    counts: Ints
    low: Floats
    mean: Floats
    high: Floats


@dataclass(frozen=True, slots=True)
class _Parts:
    """What is to be put into bins, in order of time: single readings, or hours."""

    at_us: Ints
    counts: Ints
    finite: Ints
    low: Floats
    total: Floats
    high: Floats


def bins_frame(bins: Bins) -> pd.DataFrame:
    """Return bins as a frame: at (UTC), readings, low, mean, high; their width in ``attrs["width_s"]``."""
    import pandas as pd

    columns = {"readings": bins.counts, "low": bins.low, "mean": bins.mean, "high": bins.high}
    frame = pd.DataFrame({"at": utc_times(bins.at_us), **columns})
    frame.attrs["width_s"] = bins.width_us / SECOND_US
    return frame


def read_bins(
    connection: Connection, sensor_id: int, since_us: int | None, until_us: int | None, most: int
) -> Bins:
    """Return a span of a sensor in at most so many bins of one round width, which begin at multiples of it in UTC.

    Bins of an hour and more are made of whole hours, which are not unpacked for it: where the span begins or ends
    within an hour, that hour counts whole.

    Raises
    ------
    ValueError
        If no bin is allowed.
    """
    if most < 1:
        raise ValueError(f"bins: found {most}, wanted at least 1")
    first, last = _ends(connection, sensor_id, since_us, until_us)
    if first is None or last is None:
        none, nothing = np.empty(0), np.empty(0, np.int64)
        return Bins(nothing, HOUR_US, nothing, none, none, none)
    start = first if since_us is None else max(first, since_us)
    stop = last + 1 if until_us is None else min(last + 1, until_us)
    most = max(most, 2) if start < 0 < stop else most  # bins begin in 1970: one cannot reach over it
    width = next(width for width in _widths() if (stop - 1) // width - start // width < most)
    read = _single if width < HOUR_US else _heads
    return _binned(read(connection, sensor_id, start, stop), width)


def _widths() -> Iterator[int]:
    """Yield round widths in microseconds, rising: from 1 us to a second, then parts of an hour, of a day, days."""
    yield from (factor * 10**power for power in range(6) for factor in (1, 2, 5))
    yield from (SECOND_US * s for s in (1, 2, 5, 10, 15, 20, 30, 60, 120, 300, 600, 900, 1200, 1800))
    yield from (HOUR_US * hours for hours in (1, 2, 3, 4, 6, 8, 12))
    yield from (24 * HOUR_US * days for days in count(1))


def _binned(parts: _Parts, width_us: int) -> Bins:
    """Return what the parts come to bin by bin."""
    places = parts.at_us // width_us
    firsts = np.flatnonzero(np.append(True, places[1:] != places[:-1])) if len(places) else places
    if not len(firsts):
        return Bins(parts.at_us, width_us, parts.counts, parts.low, parts.total, parts.high)
    finite = np.add.reduceat(parts.finite, firsts)
    with np.errstate(invalid="ignore", over="ignore"):
        mean = np.where(finite > 0, np.add.reduceat(parts.total, firsts) / np.maximum(finite, 1), np.nan)
    return Bins(
        places[firsts] * width_us,
        width_us,
        np.add.reduceat(parts.counts, firsts),
        np.fmin.reduceat(parts.low, firsts),
        mean,
        np.fmax.reduceat(parts.high, firsts),
    )


def _single(connection: Connection, sensor_id: int, start: int, stop: int) -> _Parts:
    """Return the readings of a span one by one."""
    series = read_span(connection, sensor_id, start, stop)
    finite = np.isfinite(series.values)
    shown = np.where(finite, series.values, np.nan)
    ones = np.ones(len(finite), np.int64)
    return _Parts(series.at_us, ones, finite.astype(np.int64), shown, np.where(finite, shown, 0.0), shown)


def _heads(connection: Connection, sensor_id: int, start: int, stop: int) -> _Parts:
    """Return the hours of a span by their heads."""
    table = tables.sensor_hour
    query = select(table.c.hour, func.substr(table.c.readings, 1, HEAD_BYTES))
    rows = connection.execute(query.where(in_span(sensor_id, start, stop)).order_by(table.c.hour)).all()
    heads = [read_head(bytes(packed)) for _, packed in rows]
    return _Parts(
        np.array([hour for hour, _ in rows], np.int64) * HOUR_US,
        np.array([head.n for head in heads], np.int64),
        np.array([head.finite for head in heads], np.int64),
        np.array([head.low for head in heads]),
        np.array([head.total for head in heads]),
        np.array([head.high for head in heads]),
    )


def _ends(
    connection: Connection, sensor_id: int, since_us: int | None, until_us: int | None
) -> tuple[int | None, int | None]:
    """Return the first and last moment of the hours of a span; None where there are none."""
    table = tables.sensor_hour
    query = select(func.min(table.c.first_us), func.max(table.c.last_us))
    first, last = connection.execute(query.where(in_span(sensor_id, since_us, until_us))).one()
    return first, last
