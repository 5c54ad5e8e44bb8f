"""What the sensors of the room read, minute by minute, whether anybody takes shots or not."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime, time, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from nightfold.simulator.evening import Night
from nightfold.simulator.machine import ZONE
from nightfold.simulator.truth import TrueWarming

_ZONE = ZoneInfo(ZONE)
ROOM_STEP_K = 0.62
"""By how much the room gets warmer without the fan that carries the heat of the laser enclosure away."""
ROOM_TIME_MIN, COIL_TIME_MIN = 50.0, 14.0
COIL_RISE_K = 7.4
"""By how much the coils end up above their water while shots are taken one after the other."""
WATER_DEGC = 18.5
CAUSE = "fan_on"
HEADING = "at,room_temperature [degC],coil_temperature [degC],vacuum_pressure [mbar]"
Minutes = NDArray[np.float64]


def find_warmings(nights: Sequence[Night]) -> tuple[TrueWarming, ...]:
    """Return what the edits of these nights did to the room."""
    return tuple(
        TrueWarming(edit.at, "room_temperature", ROOM_STEP_K, edit.parameter)
        for night in nights
        for edit in night.edits
        if edit.parameter == CAUSE and edit.new is False
    )


def write_readings(path: Path, nights: Sequence[Night], seed: int) -> Path:
    """Write one reading a minute, from the midnight before the first night to the noon after the last one."""
    begin = datetime.combine(nights[0].night, time(0), _ZONE).astimezone(UTC)
    end = datetime.combine(nights[-1].night + timedelta(days=1), time(12), _ZONE).astimezone(UTC)
    count = int((end - begin).total_seconds() // 60)
    rng = np.random.default_rng([seed, 2000])
    room = _room(begin, count, find_warmings(nights), rng)
    coils = _coils(begin, count, nights, rng)
    pumped = 2.1 + 0.4 * np.exp(-np.arange(count) / 20000) + 0.03 * (room - 21)
    pressure = (pumped + 0.02 * rng.standard_normal(count)) * 1e-11
    moments = ((begin + timedelta(minutes=number)).astimezone(_ZONE) for number in range(count))
    with path.open("w", encoding="utf-8", newline="\n") as file:
        file.write(HEADING + "\n")
        for at, *read in zip(moments, room.tolist(), coils.tolist(), pressure.tolist(), strict=True):
            file.write(f"{at.isoformat(timespec='minutes')},{read[0]:.2f},{read[1]:.2f},{read[2]:.3e}\n")
    return path


def _minute(begin: datetime, at: datetime) -> float:
    return (at - begin).total_seconds() / 60


def _room(begin: datetime, count: int, warmings: Sequence[TrueWarming], rng: np.random.Generator) -> Minutes:
    """Return the temperature of the room: warmest in the afternoon, and warmer for good without the fan."""
    minutes = np.arange(count, dtype=float)
    hour = begin.astimezone(_ZONE).hour + minutes / 60
    room = 21.2 + 0.22 * np.cos(2 * np.pi * (hour - 16) / 24) + 0.03 * rng.standard_normal(count)
    for warming in warmings:
        since = np.maximum(minutes - _minute(begin, warming.at), 0)
        room += warming.step * -np.expm1(-since / ROOM_TIME_MIN)
    return room


def _coils(begin: datetime, count: int, nights: Sequence[Night], rng: np.random.Generator) -> Minutes:
    """Return the temperature of the coils: that of their water, and warmer while shots are taken."""
    works = np.zeros(count)
    for night in nights:
        for taken in night.shots:
            works[int(_minute(begin, datetime.fromisoformat(taken.record["started"])))] = 1
    keeps = np.exp(-1 / COIL_TIME_MIN)
    rise, heated = 0.0, np.empty(count)
    for minute, working in enumerate(works.tolist()):
        rise = rise * keeps + COIL_RISE_K * (1 - keeps) * working
        heated[minute] = rise
    return WATER_DEGC + heated + 0.04 * rng.standard_normal(count)
