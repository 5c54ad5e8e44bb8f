"""What was refused, a line for each reason: ``shots.csv: lines 219-268 (50): …``."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

_RANGES = 6


def summarise(refused: Iterable[Mapping[str, Any]]) -> list[str]:
    """Return a line for each file and reason, in the order in which they were met.

    Parameters
    ----------
    refused : iterable of mappings
        With ``source``, ``line`` (None for a whole file) and ``reason``.
    """
    groups: dict[tuple[str, str], list[int | None]] = {}
    for item in refused:
        groups.setdefault((item["source"], item["reason"]), []).append(item["line"])
    return [_line(source, reason, lines) for (source, reason), lines in groups.items()]


def _line(source: str, reason: str, lines: Sequence[int | None]) -> str:
    """Return the line of one reason."""
    known = sorted({line for line in lines if line is not None})
    if not known:
        return reason
    if len(known) == 1:
        return f"refused {source}:{known[0]}: {reason}"
    return f"refused {source}: lines {ranges(known)} ({len(known)}): {reason}"


def ranges(numbers: Sequence[int]) -> str:
    """Return rising whole numbers as ranges.

    Examples
    --------
    >>> ranges([3, 7, 8, 9])
    '3, 7-9'
    """
    runs: list[list[int]] = []
    for number in numbers:
        if runs and number == runs[-1][1] + 1:
            runs[-1][1] = number
        else:
            runs.append([number, number])
    texts = [str(first) if first == last else f"{first}-{last}" for first, last in runs[:_RANGES]]
    return ", ".join(texts) + (" …" if len(runs) > _RANGES else "")
