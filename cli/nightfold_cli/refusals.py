"""What was refused, a line for each reason: ``shots.csv: lines 219-268 (50): …``.

Reasons that are alike but for what was found, such as a time, are one where there are many.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

_RANGES = 6
_ALIKE = 3
_REASON = re.compile(r"(?P<field>[^\n]*?: )?found (?P<found>.*?), wanted (?P<wanted>.*)", re.DOTALL)
_Lines = dict[str, list["int | None"]]


def summarise(refused: Iterable[Mapping[str, Any]]) -> list[str]:
    """Return a line for each file and reason, in the order in which they were met.

    Parameters
    ----------
    refused : iterable of mappings
        With ``source``, ``line`` (None for a whole file) and ``reason``.
    """
    groups: dict[tuple[str, tuple[str, ...]], _Lines] = {}
    for item in refused:
        reason = item["reason"]
        alike = groups.setdefault((item["source"], _kind(reason)), {})
        alike.setdefault(reason, []).append(item["line"])
    return [line for (source, _), alike in groups.items() for line in _lines(source, alike)]


def _kind(reason: str) -> tuple[str, ...]:
    """Return field and what was wanted, which reasons that are alike share."""
    match = _REASON.fullmatch(reason)
    return (reason,) if match is None else (match["field"] or "", match["wanted"])


def _lines(source: str, alike: Mapping[str, Sequence[int | None]]) -> list[str]:
    """Return a line a reason, or one for all where there are more than a few."""
    if len(alike) <= _ALIKE:
        return [_line(source, reason, lines) for reason, lines in alike.items()]
    match = _REASON.fullmatch(next(iter(alike)))
    assert match is not None
    reason = (
        f"{match['field'] or ''}found {match['found']} and {len(alike) - 1} others, wanted {match['wanted']}"
    )
    return [_line(source, reason, [line for lines in alike.values() for line in lines])]


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
