"""Telling a scan from hand tuning, by how its settings moved."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from math import prod

from nightfold.scans.segments import Names, group_together

MOST_AXES = 4
"""A found scan moves at most this many settings independently."""

FILLED = 0.6
"""From this share of the full grid on, the points make a grid."""


def is_designed(changes: Sequence[Names], values: Sequence[Mapping[str, str]]) -> bool:
    """Return whether two or more settings moved like the axes of one scan.

    Parameters
    ----------
    changes : sequence of frozenset of str
        What changed from each item (shot, or row of shots) to the next.
    values : sequence of mapping
        The tokens of each item; one more than `changes`.

    Notes
    -----
    A setting that changed only once, or twice between two values, was edited. Beyond that the points must
    make a grid, filled to 60 % or more (nested scans, whatever turns round in them), or the settings must
    jump together (random order, clouds): the busiest in at least half of the moves, and in at least half of
    those of every other. Knobs turned in turn, or a scan of one parameter followed by a scan of another, do
    neither.
    """
    groups = group_together(changes)
    if len(groups) > MOST_AXES or not changes:
        return False
    moves = [sum(group[0] in names for names in changes) for group in groups]
    columns = [[item.get(group[0], "") for item in values] for group in groups]
    sizes = [len(set(column)) for column in columns]
    if any(count < 3 and size < 3 for count, size in zip(moves, sizes, strict=True)):
        return False
    if len(set(zip(*columns, strict=True))) >= FILLED * prod(sizes):
        return True
    busiest = groups[moves.index(max(moves))][0]
    together = [
        sum(group[0] in names and busiest in names for names in changes) >= 0.5 * count
        for group, count in zip(groups, moves, strict=True)
    ]
    return all(together) and max(moves) >= 0.5 * sum(bool(names) for names in changes)


def dwell_lengths(changes: Sequence[Names]) -> list[int]:
    """Return how many items in a row each point was held for; `changes` as in `is_designed`."""
    lengths = [1]
    for names in changes:
        if names:
            lengths.append(1)
        else:
            lengths[-1] += 1
    return lengths


def is_steady(lengths: Sequence[int]) -> bool:
    """Return whether points were held for the same number of shots each, as in repeats in a row.

    A last point cut short is forgiven, and one point in four may be off (shots get lost, or tried again).
    """
    common = Counter(lengths).most_common()
    usual = min(length for length, count in common if count == common[0][1])
    judged = lengths[:-1] if lengths[-1] < usual else lengths
    odd = sum(length != usual for length in judged)
    return len(judged) >= 2 and odd <= 0.25 * len(judged)
