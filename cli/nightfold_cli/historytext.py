"""The history of a shot: on a screen, in a pipe, and as JSON."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from nightfold.concise import concise
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.render import Screen
from nightfold_cli.settings import ENOUGH, setting

if TYPE_CHECKING:
    from nightfold.ledger.history import FitUse, HeldReading, ShotEvent, ShotHistory

_RECORD = "another record of it came; when a first reading came is not kept"


def show_history(screen: Screen, history: ShotHistory, times: LocalTimes) -> None:
    """Draw what happened, then the readings that hold beside the earlier ones."""
    screen.heading(history.uid, f"{history.machine}, started {times.full(history.started, history.machine)}")
    if screen.terminal:
        _draw(screen, history, times)
    else:
        _tabulate(screen, history, times)


def _draw(screen: Screen, history: ShotHistory, times: LocalTimes) -> None:
    """Draw both tables for a person."""
    moments = [times.local(event.at, history.machine) for event in history.events]
    rows: list[Row] = [
        [when, event.kind, Cell.of(_lines(event, history))]
        for when, event in zip(compact(moments, seconds=True), history.events, strict=True)
    ]
    screen.table(
        [Column(heading(moments)), Column("what"), Column("", wraps=True)], rows, empty="nothing happened"
    )
    readings: list[Row] = []
    for name, held in history.readings.items():
        for place, reading in enumerate(reversed(held)):
            line = [name if place == 0 else "", reading_text(reading), reading.unit, _made_by(reading)]
            readings.append([*line, _span(reading, times, history.machine)])
    columns = [
        Column("observable"),
        Column("value", right=True),
        Column("unit"),
        Column("by", wraps=True, spare=1),
        Column("held", wraps=True),
    ]
    screen.table(columns, readings, empty="no observables yet")
    screen.note(times.note([history.machine]))


def _tabulate(screen: Screen, history: ShotHistory, times: LocalTimes) -> None:
    """Write both tables for programs."""
    heads = ("uid", "at", "kind", "what", "old", "new", "unit", "by", "why", "number")
    rows: list[Row] = [
        [
            history.uid,
            times.stamp(event.at, history.machine),
            event.kind,
            event.what,
            _plain(event.old),
            _plain(event.new),
            event.unit,
            event.by or "",
            event.why or "",
            str(event.number or ""),
        ]
        for event in history.events
    ]
    screen.table([Column(head) for head in heads], rows, empty="nothing happened")
    screen.part()
    columns = (
        "uid",
        "observable",
        "value",
        "stderr",
        "unit",
        "state",
        "derivation",
        "version",
        "since",
        "until",
    )
    rows = [
        [
            history.uid,
            name,
            setting(reading.value),
            setting(reading.stderr),
            reading.unit,
            reading.state or "",
            reading.derivation or "",
            reading.version or "",
            *(times.stamp(at, history.machine) if at else "" for at in (reading.since, reading.until)),
        ]
        for name, held in history.readings.items()
        for reading in held
    ]
    screen.table([Column(head) for head in columns], rows, empty="no observables yet")


def _lines(event: ShotEvent, history: ShotHistory) -> list[str]:
    """Return what happened, and below it who did it and why."""
    why = ": ".join(part for part in (event.by, event.why) if part)
    return [line for line in (_said(event, history), why) if line] or [""]


def _said(event: ShotEvent, history: ShotHistory) -> str:
    """Return what happened in a line."""
    if event.kind == "taken":
        return f"from {event.what}" if event.what else ""
    if event.kind == "reading":
        made = f" ({_made_by(event.new)})" if event.new.derivation else ""
        change = f"{reading_text(event.old)} -> {reading_text(event.new)} {event.unit}".rstrip()
        return f"{event.what} {change}{made}"
    if event.kind == "corrected":
        change = " -> ".join(setting(value, event.unit or None) for value in (event.old, event.new))
        return f"{event.what} {change} (correction {event.number})"
    if event.kind == "fit":
        return _use(event.new)
    if event.kind == "record":
        return _record(event.what, history)
    if event.kind.startswith(("join", "split")):
        places = (f"from scan {event.old}" if event.old else "", f"to scan {event.new}" if event.new else "")
        return " ".join(filter(None, places))
    return event.what


def _record(what: str, history: ShotHistory) -> str:
    """Return that another record came, and the first readings that it may have brought."""
    if not what:
        return _RECORD
    first = [(name, history.readings[name][0]) for name in what.split(", ")]
    said = (
        f"{name} {reading_text(held)} {held.unit}".rstrip() + f" ({_made_by(held)})" for name, held in first
    )
    return f"{_RECORD}: it may have brought {', '.join(said)}"


def _use(fit: FitUse) -> str:
    """Return which fit looked at the shot, and what it made of it."""
    state = "" if fit.state == "fresh" else f"; {fit.state} since"
    return f"fit {fit.fit}, {fit.model} of {fit.observable} in {fit.scan}: {fit.role}{state}"


def _plain(value: Any) -> str:
    """Return a value before or after, for programs."""
    if value is None:
        return ""
    if hasattr(value, "role"):
        return f"{value.role}, {value.state}"
    return setting(value.value) if hasattr(value, "stderr") else setting(value)


def reading_text(reading: HeldReading) -> str:
    """Return a reading with its uncertainty, or the word for having none."""
    if math.isnan(reading.value):
        return reading.state or "nan"
    if reading.stderr:
        return concise(reading.value, reading.stderr)
    return setting(reading.value, digits=ENOUGH)


def _made_by(reading: HeldReading) -> str:
    """Return how a reading was obtained."""
    return " ".join(part for part in (reading.derivation, reading.version) if part)


def _span(reading: HeldReading, times: LocalTimes, machine: str) -> str:
    """Return from when to when a reading held, as far as that is known."""
    since, until = (
        f"{times.local(at, machine):%Y-%m-%d %H:%M}" if at else "" for at in (reading.since, reading.until)
    )
    if since and until:
        return f"{since} to {until}"
    return f"since {since}" if since else f"until {until}" if until else "holds"


def history_entry(history: ShotHistory) -> dict[str, Any]:
    """Return a history for JSON."""
    return {
        "uid": history.uid,
        "started": history.started,
        "machine": history.machine,
        "events": [
            {
                "at": event.at,
                "kind": event.kind,
                "what": event.what,
                "old": _value(event.old),
                "new": _value(event.new),
                "unit": event.unit or None,
                "by": event.by,
                "why": event.why,
                "number": event.number,
            }
            for event in history.events
        ],
        "readings": {
            name: [
                {
                    **_value(reading),
                    "unit": reading.unit or None,
                    "since": reading.since,
                    "until": reading.until,
                }
                for reading in held
            ]
            for name, held in history.readings.items()
        },
    }


def _value(value: Any) -> Any:
    """Return what stood before or after, for JSON."""
    names: tuple[str, ...] = ()
    if hasattr(value, "role"):
        names = ("fit", "scan", "model", "observable", "along", "role", "state")
    elif hasattr(value, "stderr"):
        names = ("value", "stderr", "state", "derivation", "version")
    return {name: getattr(value, name) for name in names} if names else value
