"""Times within a shot: durations in words, starts in one column, steps as bars."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from nightfold_cli.concise import plain

_UNITS = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"))
_JUST_BELOW = 1 - 1e-9
_LEAST_CELL = 0.5
UNKNOWN = "?"
Scale = Literal["linear", "logarithm"]


@dataclass(frozen=True, slots=True)
class Bar:
    """Where the bar of a step lies, in cells; `known` is False where its duration is not."""

    start: int
    length: int
    known: bool


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
    texts = [plain(float(f"{at / size:.12g}")) for at in clock]
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
    its duration: ten times as long is one unit more, and the shortest has one.

    Parameters
    ----------
    durations : sequence of float
        Seconds; what is not known, or not above zero, gets a mark of one cell.
    width : int
        Cells for all of them together.
    """
    known = [duration for duration in durations if duration > 0 and math.isfinite(duration)]
    marks = len(durations) - len(known)
    room = max(1, width - marks)
    linear = not known or min(known) * room >= _LEAST_CELL * math.fsum(known)
    if linear:
        per_second = room / math.fsum(known) if known else 0.0
        lengths = [duration * per_second if duration > 0 else 1.0 for duration in durations]
    else:
        shortest = min(known)
        units = [1 + math.log10(duration / shortest) if duration > 0 else 1.0 for duration in durations]
        lengths = [unit * width / math.fsum(units) for unit in units]
    ends = [math.fsum(lengths[: place + 1]) for place in range(len(lengths))]
    placed = []
    for duration, length, end in zip(durations, lengths, ends, strict=True):
        start = max(0, min(round(end - length), width - 1))
        placed.append(Bar(start, max(1, min(round(end), width) - start), not math.isnan(duration)))
    return placed, "linear" if linear else "logarithm"
