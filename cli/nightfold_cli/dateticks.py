"""Round moments along a time axis, and their labels: years, months, days, hours, minutes."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

from nightfold_cli.ticks import Ticks

_SECONDS = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200)
_DAYS = (1, 2, 7, 14)
_MONTHS = (1, 2, 3, 6, 12, 24, 60, 120)
_DAY_S = 86400.0


def date_ticks(zone: ZoneInfo) -> Callable[[float, float, int], Ticks]:
    """Return a maker of ticks for an axis in seconds since 1970, at round local times of a zone."""

    def ticks(low: float, high: float, most: int) -> Ticks:
        most = max(1, min(most, 8))
        moments, pattern = _moments(low, high, most, zone)
        positions = tuple(moment.timestamp() for moment in moments)
        return Ticks(positions, tuple(f"{moment:{pattern}}" for moment in moments), "", 0)

    return ticks


def _moments(low: float, high: float, most: int, zone: ZoneInfo) -> tuple[list[datetime], str]:
    """Return at most so many round local moments between two ends, and how they are written."""
    first, last = (datetime.fromtimestamp(end, UTC).astimezone(zone) for end in (low, high))
    for step in _SECONDS:
        if (high - low) / step <= most:
            found = _within(_by_seconds(first, step, most), low, high)
            within_a_day = len({moment.date() for moment in (first, *found, last)}) == 1
            pattern = "%H:%M:%S" if step < 60 else "%H:%M" if within_a_day else "%m-%d %H:%M"
            return found, pattern
    for days in _DAYS:
        if (high - low) / (days * _DAY_S) <= most:
            return _within(_by_days(first, days, most), low, high), "%m-%d"
    months = next((m for m in _MONTHS if (high - low) / (m * 30.4 * _DAY_S) <= most), _MONTHS[-1])
    return _within(_by_months(first, months, most), low, high), "%Y-%m"


def _within(moments: list[datetime], low: float, high: float) -> list[datetime]:
    """Return the moments between two ends, each once (a clock put forward makes one of two)."""
    by_time = {moment.timestamp(): moment for moment in moments}
    return [moment for at, moment in by_time.items() if low <= at <= high]


def _by_seconds(first: datetime, step: int, most: int) -> list[datetime]:
    """Return moments at multiples of a step from local midnight on.

    Below an hour they follow each other in true time, through a clock change too; from an hour on they are round
    on the clock.
    """
    zone = first.tzinfo
    midnight = first.replace(hour=0, minute=0, second=0, microsecond=0, tzinfo=None)
    skipped = int((first.replace(tzinfo=None) - midnight).total_seconds()) // step
    begin = midnight + timedelta(seconds=skipped * step)
    steps = [timedelta(seconds=k * step) for k in range(most + 4)]
    if step >= 3600:
        on_the_clock = [(begin + passed).replace(tzinfo=zone) for passed in steps]
        return [moment.astimezone(UTC).astimezone(zone) for moment in on_the_clock]
    start = begin.replace(tzinfo=zone, fold=first.fold).astimezone(UTC)
    return [(start + passed).astimezone(zone) for passed in steps]


def _by_days(first: datetime, step: int, most: int) -> list[datetime]:
    """Return local midnights; those of weeks are Mondays."""
    midnight = first.replace(hour=0, minute=0, second=0, microsecond=0, tzinfo=None)
    if step % 7 == 0:
        midnight -= timedelta(days=midnight.weekday())
    return [(midnight + timedelta(days=k * step)).replace(tzinfo=first.tzinfo) for k in range(most + 3)]


def _by_months(first: datetime, step: int, most: int) -> list[datetime]:
    """Return first days of months, those of whole years Januaries."""
    begin = first.year * 12 + first.month - 1
    begin -= begin % step
    months = [begin + k * step for k in range(most + 3)]
    return [datetime(month // 12, month % 12 + 1, 1, tzinfo=first.tzinfo) for month in months]
