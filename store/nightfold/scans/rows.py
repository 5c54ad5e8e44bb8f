"""Joining stretches of shots into nested scans, row by row."""

from __future__ import annotations

from collections.abc import Sequence

from nightfold.scans.patterns import is_designed, is_steady
from nightfold.scans.segments import Names, cut, group_together
from nightfold.scans.stream import StreamShot
from nightfold.scans.stretches import FINE_TOLL, Stretch

ROW_TOLL = 4.0
FEWEST_ROWS = 3
ALIKE = 0.8


def join_rows(shots: Sequence[StreamShot], stretches: Sequence[Stretch]) -> list[Stretch]:
    """Return the stretches with rows of nested scans joined, from the inside outwards.

    Rows are neighbours in which the same names moved through the same points, and between which others
    changed: at least 3 rows, with at least 3 outer values (or 3 changes), which several outer parameters must
    have moved through as a design would (`is_designed`). An outer parameter that changed once or
    twice is an edit. The last row may be unfinished.
    """
    current = list(stretches)
    while True:
        joined: list[Stretch] = []
        place = 0
        while place < len(current):
            rows = _rows_from(shots, current, place)
            joined.extend(_join(shots, rows) if len(rows) >= FEWEST_ROWS else rows)
            place += len(rows)
        if len(joined) == len(current):
            return joined
        current = joined


def _rows_from(shots: Sequence[StreamShot], stretches: Sequence[Stretch], place: int) -> list[Stretch]:
    """Return the longest list of rows that begins with one stretch; at least that one."""
    first = stretches[place]
    rows = [first]
    for row in stretches[place + 1 :]:
        if not row.moving <= first.moving or shots[row.start].changed <= first.moving:
            break
        fit = _compare(shots, rows[-1], row, first.moving)
        if fit == "alike" or (fit == "part" and len(rows) >= FEWEST_ROWS - 1):
            rows.append(row)
        if fit != "alike":
            break
    return rows


def _compare(shots: Sequence[StreamShot], row: Stretch, later: Stretch, names: Names) -> str:
    """Return whether two rows went through the same points: ``alike``, ``part`` (unfinished) or ``apart``.

    Where all names moved together, one with the same points is enough: the others may follow
    the outer parameter as well.
    """
    choices = [sorted(names)]
    if len(names) > 1 and len(group_together(shot.changed for shot in shots[row.start + 1 : row.stop])) == 1:
        choices += [[name] for name in choices[0]]
    fits = [_overlap(_points(shots, row, choice), _points(shots, later, choice)) for choice in choices]
    return min(fits, key=("alike", "part", "apart").index)


def _points(shots: Sequence[StreamShot], row: Stretch, names: Sequence[str]) -> set[tuple[str, ...]]:
    return {tuple(shot.values.get(name, "") for name in names) for shot in shots[row.start : row.stop]}


def _overlap(known: set[tuple[str, ...]], points: set[tuple[str, ...]]) -> str:
    if len(known & points) >= ALIKE * max(len(known), len(points)):
        return "alike"
    return "part" if points < known else "apart"


def _join(shots: Sequence[StreamShot], rows: Sequence[Stretch], toll: float = ROW_TOLL) -> list[Stretch]:
    """Return the rows, joined where an outer parameter was scanned over them."""
    inner = rows[0].moving
    changes = [shots[row.start].changed - inner for row in rows]
    joined: list[Stretch] = []
    for start, stop in cut(changes, toll):
        part = rows[start:stop]
        if _is_scanned(shots, part, changes[start + 1 : stop]):
            joined.append(Stretch(part[0].start, part[-1].stop, inner.union(*changes[start + 1 : stop])))
        elif toll > FINE_TOLL and stop - start > FEWEST_ROWS:
            joined.extend(_join(shots, part, FINE_TOLL))
        else:
            joined.extend(part)
    return joined


def _is_scanned(shots: Sequence[StreamShot], rows: Sequence[Stretch], changes: Sequence[Names]) -> bool:
    if len(rows) < FEWEST_ROWS:
        return False
    if not rows[0].moving and not is_steady([len(row) for row in rows]):
        return False
    values = [shots[row.start].values for row in rows]
    groups = group_together(changes)
    if len(groups) > 1:
        return is_designed(changes, values)
    return len(changes) >= 3 or len({item.get(groups[0][0], "") for item in values}) >= 3
