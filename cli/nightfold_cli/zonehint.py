"""A hint for records whose times carry an offset while no machine card names their zone."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from nightfold.store import Store

_LOOKED_AT = 200
_LINES = (".jsonl", ".ndjson", ".json")


def zone_hint(store: Store, files: Sequence[str]) -> str | None:
    """Return a sentence where records have one offset, not that of UTC, and their machine has no card."""
    cards = {*store.cards(), *store.aliases()}
    found: dict[str, set[timedelta | None]] = {}
    for name in files:
        if Path(name).suffix.lower() in _LINES:
            for machine, offset in _offsets(name):
                found.setdefault(machine, set()).add(offset)
    for machine, offsets in found.items():
        offset = next(iter(offsets))
        if machine not in cards and len(offsets) == 1 and offset:
            return (
                f"times are shown in UTC, while the records of {machine} carry {_written(offset)}; "
                f"a machine card names the zone: nightfold new --machine {machine} --zone ZONE writes one, "
                "take --card uses it"
            )
    return None


def _offsets(name: str) -> list[tuple[str, timedelta | None]]:
    """Return machine and offset of the first records of a file."""
    from nightfold.intake.files import read_file

    records = [incoming.record for incoming in islice(read_file(name), _LOOKED_AT)]
    return [(str(record["machine"]), _offset(record)) for record in records if record and _is_shot(record)]


def _is_shot(record: Any) -> bool:
    """Return whether a record says machine and time."""
    return isinstance(record.get("machine"), str) and isinstance(record.get("started"), str)


def _offset(record: Any) -> timedelta | None:
    """Return the offset of a record's time, None without one."""
    try:
        return datetime.fromisoformat(record["started"]).utcoffset()
    except ValueError:
        return None


def _written(offset: timedelta) -> str:
    """Return an offset as it is written: ``+02:00``."""
    minutes = round(offset.total_seconds() / 60)
    hours, rest = divmod(abs(minutes), 60)
    return f"{'-' if minutes < 0 else '+'}{hours:02}:{rest:02}"
