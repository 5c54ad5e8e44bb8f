"""Times: microseconds since 1970 in UTC inside, ISO 8601 with an offset outside, and the nights between.

A *night* runs from one boundary (local noon by default) to the next and has the date of its evening.
"""

from __future__ import annotations

from datetime import UTC, date, datetime, time, timedelta
from functools import cache
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from nightfold.errors import NotFound

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    from numpy.typing import NDArray

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND = timedelta(microseconds=1)
_WITH_OFFSET = "an ISO 8601 time with an offset, such as 2026-10-05T21:14:03+02:00"
_FIRST, _LAST = datetime(1900, 1, 1, tzinfo=UTC), datetime(2200, 1, 1, tzinfo=UTC)


@cache
def find_zone(name: str) -> ZoneInfo:
    """Return the IANA time zone of that name.

    Raises
    ------
    NotFound
        If there is no such zone.
    """
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError) as problem:
        raise NotFound(
            f"time zone {name!r} is not known; wanted an IANA name such as Europe/Vienna"
        ) from problem


def to_us(moment: datetime) -> int:
    """Return microseconds since 1970-01-01T00:00Z of an aware datetime, exactly."""
    return (moment - EPOCH) // _MICROSECOND


def from_us(us: int) -> datetime:
    """Return the aware UTC datetime of microseconds since 1970."""
    return EPOCH + timedelta(microseconds=us)


def now_us() -> int:
    """Return the present time in microseconds since 1970."""
    return to_us(datetime.now(UTC))


def parse_moment(text: str | datetime, zone: ZoneInfo | None = None) -> int:
    """Return microseconds since 1970 of an ISO 8601 time.

    Parameters
    ----------
    text : str or datetime
        Date and time with an offset; a naive one is read in `zone`.
    zone : ZoneInfo, optional
        Where naive times belong; without it they are refused.

    Raises
    ------
    ValueError
        If it is no date with a time, carries no offset and no zone is given, falls into the hour that a
        clock change repeats or leaves out, or lies outside 1900-2200. The message says what was wanted.
    """
    moment = text if isinstance(text, datetime) else _read(text)
    if moment.tzinfo is None:
        if zone is None:
            raise ValueError(
                f"{_WITH_OFFSET}; or naive_times = true in the machine card, if it is a time of its zone"
            )
        moment = _place(moment, zone)
    if not _FIRST <= moment < _LAST:
        raise ValueError("a time between the years 1900 and 2200")
    return to_us(moment)


def _read(text: str) -> datetime:
    if not isinstance(text, str) or len(text) < 11 or text[10] not in "Tt ":
        raise ValueError(_WITH_OFFSET)
    try:
        return datetime.fromisoformat(text.strip())
    except ValueError as problem:
        raise ValueError(_WITH_OFFSET) from problem


def _place(moment: datetime, zone: ZoneInfo) -> datetime:
    early, late = moment.replace(tzinfo=zone, fold=0), moment.replace(tzinfo=zone, fold=1)
    if early.utcoffset() == late.utcoffset():
        return early
    back = early.astimezone(UTC).astimezone(zone).replace(tzinfo=None)
    if back == moment.replace(fold=0):
        raise ValueError(f"an offset: the clocks of {zone.key} show this hour twice")
    raise ValueError(f"an existing time: the clocks of {zone.key} leave this hour out")


def nights_of(started_us: NDArray[np.int64], zone: str, boundary: time = time(12)) -> NDArray[np.object_]:
    """Return the date of the night each moment belongs to.

    Parameters
    ----------
    started_us : (n,) int array, microseconds since 1970
    zone : str
        IANA name of the machine's time zone.
    boundary : datetime.time
        Local time at which one night ends and the next begins.

    Returns
    -------
    (n,) object array of datetime.date
    """
    import numpy as np

    local = local_times(started_us, zone).tz_localize(None).to_numpy().astype("datetime64[us]")
    shift = np.timedelta64(boundary.hour * 3600 + boundary.minute * 60 + boundary.second, "s")
    dates, place = np.unique((local - shift).astype("datetime64[D]"), return_inverse=True)
    # a boundary in the hour that the clocks show twice counts when it comes first: nights follow each other
    ends = np.array([_end_of(night, zone, boundary) for night in dates.tolist()], dtype=np.int64)
    nights: NDArray[np.object_] = (dates[place] + (started_us >= ends[place])).astype(object)
    return nights


def _end_of(night: date, zone: str, boundary: time) -> int:
    return to_us(datetime.combine(night + timedelta(days=1), boundary, find_zone(zone)))


def local_times(started_us: NDArray[np.int64], zone: str) -> pd.DatetimeIndex:
    """Return the moments as an index of the given zone."""
    return utc_times(started_us).tz_convert(find_zone(zone))


def utc_times(started_us: NDArray[np.int64]) -> pd.DatetimeIndex:
    """Return the moments as a UTC index with microsecond resolution."""
    import numpy as np
    import pandas as pd

    stamps = np.asarray(started_us, dtype=np.int64).astype("datetime64[us]")
    return pd.DatetimeIndex(stamps).tz_localize("UTC")
