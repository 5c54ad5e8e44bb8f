"""Where a stream of shots pauses: decided gap by gap from the shots around it, whatever else has been loaded."""

from __future__ import annotations

from collections.abc import Sequence
from statistics import median_low

SHORTEST_PAUSE_US = 300_000_000
CYCLES = 10
REACH = 10
"""How many intervals on either side have a say."""


def find_pauses(started_us: Sequence[int]) -> list[int]:
    """Return the places of the shots that come after a pause.

    A pause is a gap of more than 5 minutes and more than ten times the median of the 10 intervals before it and the 10
    after it (the gap itself left out).

    Parameters
    ----------
    started_us : sequence of int
        In order, microseconds.
    """
    return [
        place
        for place in range(1, len(started_us))
        if started_us[place] - started_us[place - 1] > SHORTEST_PAUSE_US and _is_long(started_us, place)
    ]


def _is_long(started_us: Sequence[int], place: int) -> bool:
    first, last = max(place - 1 - REACH, 0), min(place + REACH, len(started_us) - 1)
    around = [*range(first + 1, place), *range(place + 1, last + 1)]
    intervals = [started_us[k] - started_us[k - 1] for k in around]
    return not intervals or started_us[place] - started_us[place - 1] > CYCLES * median_low(intervals)
