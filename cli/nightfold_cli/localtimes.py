"""Times as the people of a machine read them: local, with the zone named on screen."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo


class LocalTimes:
    """Times of shots in the zones of their machines.

    Parameters
    ----------
    zones : mapping of str to str
        IANA zone of each machine; a machine that is not named here is shown in UTC.
    """

    def __init__(self, zones: Mapping[str, str]) -> None:
        self._zones = {machine: ZoneInfo(zone) for machine, zone in zones.items()}
        self._names = dict(zones)

    def zone(self, machine: str | None = None) -> ZoneInfo:
        """Return the zone of a machine; without a name, the one zone there is, or UTC."""
        if machine is None:
            names = set(self._names.values())
            return ZoneInfo(names.pop()) if len(names) == 1 else ZoneInfo("UTC")
        return self._zones.get(machine, ZoneInfo("UTC"))

    def local(self, at: Any, machine: str | None = None) -> datetime:
        """Return an aware time in the machine's zone; pandas' timestamps are accepted."""
        moment = at.to_pydatetime(warn=False) if hasattr(at, "to_pydatetime") else at
        aware: datetime = moment if moment.tzinfo else moment.replace(tzinfo=UTC)
        return aware.astimezone(self.zone(machine))

    def full(self, at: Any, machine: str | None = None) -> str:
        """Return date, time and zone: ``2026-10-05 21:14:03 CEST``."""
        return f"{self.local(at, machine):%Y-%m-%d %H:%M:%S %Z}"

    def stamp(self, at: Any, machine: str | None = None) -> str:
        """Return the time for machines to read, local with offset: ``2026-10-05T21:14:03+02:00``."""
        return self.local(at, machine).isoformat(timespec="seconds")

    def note(self, machines: Iterable[str | None]) -> str:
        """Return the sentence that names the zone or zones of a table."""
        named = sorted({str(self.zone(machine)) for machine in machines})
        return (
            f"times in {named[0]}" if len(named) == 1 else "times local to each machine: " + ", ".join(named)
        )


def compact(moments: Iterable[datetime], *, seconds: bool = False) -> list[str]:
    """Return local times for one column: no year where all are of one, the zone where there are several.

    Parameters
    ----------
    moments : iterable of datetime
        Aware local times.
    seconds : bool
        Whether seconds are written.
    """
    listed = list(moments)
    pattern = "%m-%d %H:%M" if len({moment.year for moment in listed}) == 1 else "%Y-%m-%d %H:%M"
    pattern += ":%S" if seconds else ""
    if len({str(moment.tzinfo) for moment in listed}) > 1:
        pattern += " %Z"
    return [f"{moment:{pattern}}{offset_if_it_changes(moment)}" for moment in listed]


def offset_if_it_changes(moment: datetime) -> str:
    """Return `` +02:00`` for a local time of a night in which clocks are changed, else nothing.

    A night goes from noon to noon; its hour after midnight may come twice, and only the offset tells which it is.
    """
    noon = moment.replace(hour=12, minute=0, second=0, microsecond=0, fold=0)
    if moment.hour < 12:
        noon -= timedelta(days=1)
    if noon.utcoffset() == (noon + timedelta(days=1)).utcoffset():
        return ""
    return " " + moment.isoformat()[-6:]


def heading(moments: Iterable[datetime], name: str = "when") -> str:
    """Return the head of a column of `compact` times, with the year that they leave out."""
    years = {moment.year for moment in moments}
    return f"{name} ({years.pop()})" if len(years) == 1 else name


def parse_moment(text: str, zone: ZoneInfo) -> datetime:
    """Return the time a person typed: ISO 8601, a day alone meaning its midnight, without offset local.

    Raises
    ------
    ValueError
        If the text is not a day or a time.
    """
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        raise ValueError(
            f"found {text!r}, wanted a day or a time like 2026-10-05 or 2026-10-05T21:14"
        ) from None
    return moment if moment.tzinfo else moment.replace(tzinfo=zone)
