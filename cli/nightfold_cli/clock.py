"""Times within a shot: durations in words, starts in one column, steps as bars."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

from nightfold.concise import plain

_UNITS = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"))
_JUST_BELOW = 1 - 1e-9
_LEAST_CELL = 0.5
_LEAST_DECADE, _MOST_DECADE = 0.5, 5.0
UNKNOWN = "?"
Scale = Literal["linear", "logarithm", "crowded"]


@dataclass(frozen=True, slots=True)
class Bar:
    """Where the bar of a step lies, in cells; one of no length is only a mark."""

    start: int
    length: int
    kind: Literal["bar", "mark", "unknown"]


def lasting(seconds: float, digits: int = 6) -> str:
    """Return a duration in the unit that suits it: ``10 s``, ``8.4 ms``, ``5 µs``; ``?`` for NaN.

    Examples
    --------
    >>> lasting(0.0084)
    '8.4 ms'
    """
    if not math.isfinite(seconds):
        return UNKNOWN
    size, unit = unit_of(seconds)
    return f"{plain(float(f'{seconds / size:.{digits}g}'))} {unit}"


def unit_of(seconds: float) -> tuple[float, str]:
    """Return the unit in which a time is a number of one to three digits, as seconds and name."""
    if not seconds:
        return _UNITS[0]
    return next((pair for pair in _UNITS if abs(seconds) >= pair[0] * _JUST_BELOW), _UNITS[-1])


def starts(durations: Sequence[float]) -> tuple[list[str], str]:
    """Return when each step starts, aligned at the decimal point, and the unit; `` +?`` follows what is not known.

    Parameters
    ----------
    durations : sequence of float
        Seconds; NaN where not known.
    """
    known = [0.0 if math.isnan(duration) else duration for duration in durations]
    clock = [math.fsum(known[:place]) for place in range(len(known))]
    size, unit = unit_of(max(clock, default=0.0))
    texts = [f"{Decimal(f'{at / size:.12g}'):f}" for at in clock]
    whole = [text.partition(".") for text in texts]
    before = max((len(head) for head, _, _ in whole), default=0)
    after = max((len(dot + tail) for _, dot, tail in whole), default=0)
    first = next((place for place, one in enumerate(durations) if math.isnan(one)), len(known))
    return [
        head.rjust(before) + (dot + tail).ljust(after) + (" +?" if place > first else "")
        for place, (head, dot, tail) in enumerate(whole)
    ], unit


def bars(durations: Sequence[float], width: int) -> tuple[list[Bar], Scale]:
    """Return the bars of steps that follow each other, and their scale.

    The scale is linear where the shortest step still fills half a cell. Else a bar's length goes by the logarithm of
    its duration: ten times as long is one unit more, and the shortest has one. Where there are so many steps that a
    unit would be less than half a cell, the bars do not follow each other but all begin at the left.

    Parameters
    ----------
    durations : sequence of float
        Seconds; what is not known, or not above zero, gets a mark of one cell.
    width : int
        Cells for all of them together.
    """
    known = [duration for duration in durations if _has_length(duration)]
    room = max(1, width - (len(durations) - len(known)))
    if not known or min(known) * room >= _LEAST_CELL * math.fsum(known):
        cell = math.fsum(known) / room
        lengths = [duration / cell if _has_length(duration) else 1.0 for duration in durations]
        return _one_after_the_other(durations, lengths, width), "linear"
    units = [1 + math.log10(one / min(known)) if _has_length(one) else 1.0 for one in durations]
    unit = width / math.fsum(units)
    if unit >= _LEAST_DECADE:
        return _one_after_the_other(durations, [unit * one for one in units], width), "logarithm"
    unit = min(_MOST_DECADE, width / max(units))
    return [
        Bar(0, max(1, round(unit * one)) if _has_length(duration) else 1, _kind(duration))
        for duration, one in zip(durations, units, strict=True)
    ], "crowded"


def _one_after_the_other(durations: Sequence[float], lengths: Sequence[float], width: int) -> list[Bar]:
    """Return bars each of which begins where the one before ends, and has one cell at least."""
    placed: list[Bar] = []
    end = 0.0
    for duration, length in zip(durations, lengths, strict=True):
        start = max(0, min(round(end), width - 1))
        end += length
        placed.append(Bar(start, max(1, min(round(end), width) - start), _kind(duration)))
    return placed


def _has_length(duration: float) -> bool:
    return math.isfinite(duration) and duration > 0


def _kind(duration: float) -> Literal["bar", "mark", "unknown"]:
    if _has_length(duration):
        return "bar"
    return "mark" if math.isfinite(duration) else "unknown"
