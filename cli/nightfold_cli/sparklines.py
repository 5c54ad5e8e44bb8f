"""Lists of numbers drawn as a row of bars, several on one scale."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

PLAIN_HEIGHTS = "_.-=+*#%"


def sparklines(ramps: Sequence[Sequence[float]], width: int, *, unicode: bool) -> list[str]:
    """Return each list as bars of one common scale, at most `width` characters each."""
    from nightfold.scans.trend import HEIGHTS, trend

    sampled = [_sampled(ramp, width) for ramp in ramps]
    together = [number for ramp in sampled for number in ramp]
    bars = trend(range(len(together)), together, len(together))
    if not unicode:
        bars = bars.translate(str.maketrans(HEIGHTS, PLAIN_HEIGHTS))
    lines, end = [], 0
    for ramp in sampled:
        lines.append(bars[end : end + len(ramp)])
        end += len(ramp)
    return lines


def _sampled(ramp: Sequence[float], width: int) -> list[float]:
    """Return at most so many numbers: each the mean of its part of the list, the first and the last as they are."""
    if len(ramp) <= width:
        return list(ramp)
    ends = [len(ramp) * k // width for k in range(width + 1)]
    parts = [ramp[low:high] for low, high in pairwise(ends)]
    means = [sum(part) / len(part) for part in parts]
    return [ramp[0], *means[1:-1], ramp[-1]] if width > 1 else means
