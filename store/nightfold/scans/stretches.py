"""Stretches of consecutive shots in which the same few settings moved."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from nightfold.scans.patterns import is_designed
from nightfold.scans.segments import Names, cut, group_together
from nightfold.scans.stream import StreamShot, moved_names

FINE_TOLL = 2.0
CHANCE_LENGTH = 8
"""In random order some axis may stand still for a few shots; for this many it hardly does."""

NEAR = 256
"""So many shots before a doubtful part are looked at to judge it."""


@dataclass(frozen=True, slots=True)
class Stretch:
    """Consecutive shots ``start`` to ``stop`` (exclusive), and the names that moved within them."""

    start: int
    stop: int
    moving: Names

    def __len__(self) -> int:
        """Return the number of shots."""
        return self.stop - self.start


def find_stretches(shots: Sequence[StreamShot], start: int, stop: int, toll: float) -> list[Stretch]:
    """Return a run of shots, cut into stretches in which the same few settings moved.

    Where several settings moved but not like the axes of one scan, the cut is repeated with a finer toll.
    """
    stretches: list[Stretch] = []
    for stretch in _coarse(shots, start, stop, toll):
        if len(stretch.moving) > 1 and not _is_one(shots, stretch):
            stretches.extend(_coarse(shots, stretch.start, stretch.stop, FINE_TOLL))
        else:
            stretches.append(stretch)
    return stretches


def _coarse(shots: Sequence[StreamShot], start: int, stop: int, toll: float) -> list[Stretch]:
    """Return the cheapest stretches, those joined again that only chance made to look different."""
    joined: list[Stretch] = []
    for first, last in cut([shot.changed for shot in shots[start:stop]], toll):
        stretch = Stretch(start + first, start + last, moved_names(shots, start + first, start + last))
        while joined and (whole := _rejoin(shots, joined[-1], stretch)):
            joined.pop()
            stretch = whole
        joined.append(stretch)
    return joined


def _is_one(shots: Sequence[StreamShot], stretch: Stretch) -> bool:
    inside = shots[stretch.start : stretch.stop]
    changes = [shot.changed for shot in inside[1:]]
    return len(group_together(changes)) == 1 or is_designed(changes, [shot.values for shot in inside])


def _rejoin(shots: Sequence[StreamShot], one: Stretch, other: Stretch) -> Stretch | None:
    """Return two neighbours as one stretch, if the same names moved in both, or would but for chance.

    In random order two axes may move together for a while, or one stand still: then the shorter part, with
    fewer names moving, must not be long, and the whole must look designed.
    """
    moving = one.moving | other.moving
    if not moving or not shots[other.start].changed <= moving:
        return None
    whole = Stretch(one.start, other.stop, moving)
    if one.moving == other.moving:
        return whole
    lesser = one if other.moving == moving else other
    greater = other if lesser is one else one
    longest = min(CHANCE_LENGTH, len(greater)) if lesser.moving else 2
    if greater.moving != moving or len(lesser) >= longest:
        return None
    near = Stretch(max(one.start, other.start - NEAR), other.stop, moving)
    return whole if len(moving) > 1 and _is_one(shots, near) else None
