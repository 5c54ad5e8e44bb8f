"""Scans of shots that declare what they sweep: only an edit of another parameter ends them."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Mapping, Sequence

from nightfold.scans.axes import follows
from nightfold.scans.columns import encode
from nightfold.scans.segments import Names
from nightfold.scans.stream import StreamShot, columns_of

REACH = 3
"""How many moves of a swept parameter before and after one are looked at."""


def cut_at_edits(shots: Sequence[StreamShot], start: int, stop: int) -> list[tuple[int, int]]:
    """Return a run of shots with one declared swept set, cut before each edit of another parameter.

    A change is no edit if the name changes along with a swept one: in more than half of the moves of that one
    near it (3 to either side), or if it is an exact function of a swept parameter within the run. Nor if it
    changes at more than half of all shots near it: then it is no setting but a reading or a counter.
    """
    swept = shots[start].swept
    changes = [frozenset[str](), *(shot.changed for shot in shots[start + 1 : stop])]
    others = frozenset().union(*changes) - swept
    if not others:
        return [(start, stop)]
    places = _places_of_change(changes)
    leaders = [places[name] for name in sorted(swept & places.keys())]
    leaders.append(list(range(1, stop - start)))
    suspects = {
        name: edits
        for name in others
        if (edits := [k for k in places[name] if not _keeps_step(k, places[name], leaders)])
    }
    cleared = _functions(shots[start:stop], swept, suspects)
    cuts = sorted({start + k for name, edits in suspects.items() if name not in cleared for k in edits})
    return list(zip([start, *cuts], [*cuts, stop], strict=True))


def _places_of_change(changes: Sequence[Names]) -> dict[str, list[int]]:
    places: dict[str, list[int]] = {}
    for k, names in enumerate(changes):
        for name in names:
            places.setdefault(name, []).append(k)
    return places


def _keeps_step(place: int, own: Sequence[int], leaders: Sequence[Sequence[int]]) -> bool:
    return any(_in_step(place, own, leader) for leader in leaders)


def _in_step(place: int, own: Sequence[int], leader: Sequence[int]) -> bool:
    """Return whether `place` is one of the leader's moves, most of which near it are its own too."""
    rank = bisect_left(leader, place)
    if rank == len(leader) or leader[rank] != place:
        return False
    near = leader[max(rank - REACH, 0) : rank + REACH + 1]
    shared = sum(own[k] == move for move in near if (k := bisect_left(own, move)) < len(own))
    return 2 * shared > len(near)


def _functions(
    shots: Sequence[StreamShot], swept: Names, suspects: Mapping[str, Sequence[int]]
) -> frozenset[str]:
    if not suspects:
        return frozenset()
    columns = {name: encode(values) for name, values in columns_of(shots, swept | suspects.keys()).items()}
    return frozenset(
        name for name in suspects if any(follows(columns[leader], columns[name]) for leader in swept)
    )
