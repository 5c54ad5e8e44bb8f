"""Where exactly a scan begins and ends, when shots at nominal settings stand before, after or within it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from itertools import pairwise
from math import isfinite, log, prod
from statistics import median_low

from nightfold.scans.patterns import FILLED, dwell_lengths
from nightfold.scans.stream import Point, Run, moved_names
from nightfold.scans.stretches import Stretch

ENOUGH_POINTS = 5
"""From so many other points on, one that does not fit among them is taken for no point of the scan."""


def wanted_shots(visits: Mapping[Point, int], point: Point) -> int | None:
    """Return how many more shots at `point` a scan with these visits lacks; None if it cannot be told.

    A point visited less often than nearly all others lacks the difference; a point not visited at all
    belongs to the scan if it fills a hole in, or is the next step of, a grid of equal steps or ratios.
    """
    usual = median_low(visits.values())
    if point in visits:
        uniform = sum(count == usual for count in visits.values()) >= 0.75 * len(visits)
        return max(usual - visits[point], 0) if uniform else None
    columns = [sorted({p[k] for p in visits}, key=_order) for k in range(len(point))]
    strange = [k for k, column in enumerate(columns) if point[k] not in column]
    if not strange:
        return usual if len(visits) >= FILLED * prod(map(len, columns)) else None
    fits = [is_on_grid(columns[k], point[k]) for k in strange]
    if False in fits or any(_is_far(columns[k], point[k]) for k in strange):
        return 0
    return usual if len(point) == 1 and fits == [True] else None


def _order(value: float | str) -> tuple[bool, float, str]:
    return (True, 0.0, value) if isinstance(value, str) else (False, value, "")


def is_on_grid(column: Sequence[float | str], value: float | str) -> bool | None:
    """Return whether a value is a hole in, or the next step of, a regular grid; None if it cannot be told.

    `column` holds the sorted other values: at least 3 numbers (5 to refuse one between the steps), of
    which no more than a quarter, plus one, are missing from the grid.
    """
    numbers = [each for each in column if not isinstance(each, str)]
    if len(numbers) < max(3, len(column)) or isinstance(value, str):
        return None
    fits = _fits(numbers, value)
    if fits is None and min(numbers) > 0:
        return _fits([log(each) for each in numbers], log(value)) if value > 0 else None
    return fits


def _is_far(column: Sequence[float | str], value: float | str) -> bool:
    """Return whether a number is more than 3 times the widest gap away from all others (5 or more)."""
    numbers = [each for each in column if not isinstance(each, str)]
    if len(numbers) < ENOUGH_POINTS or isinstance(value, str):
        return False
    widest = max(later - earlier for earlier, later in pairwise(numbers))
    return min(abs(value - each) for each in numbers) > 3 * widest


def is_regular(column: Sequence[float | str]) -> bool:
    """Return whether at least 4 numbers stand on a grid of equal steps or ratios, with few holes."""
    ordered = sorted(column, key=_order)
    return len(ordered) >= 4 and is_on_grid(ordered[:-1], ordered[-1]) is True


def _fits(numbers: Sequence[float], value: float) -> bool | None:
    step = min(later - earlier for earlier, later in pairwise(numbers))
    if not step > 0:
        return None
    places = [(each - numbers[0]) / step for each in numbers]
    place = (value - numbers[0]) / step
    if not (isfinite(places[-1]) and isfinite(place)):
        return None
    if any(abs(each - round(each)) > 1e-3 for each in places):
        return None
    if places[-1] + 1 - len(places) > 1 + len(places) / 4:
        return None
    if abs(place - round(place)) > 1e-3:
        return False if len(numbers) >= ENOUGH_POINTS else None
    return True if -1 <= round(place) <= round(places[-1]) + 1 else None


def split_at_rests(run: Run, stretch: Stretch, axes: Sequence[str]) -> list[Stretch]:
    """Return the parts of a scan between rests at one point that it does not lack.

    A rest is longer than 4 shots and than 3 usual dwells; or longer than a usual dwell, back at the point
    that was set before the scan and never visited in it. Where it cannot be told whether the scan lacks the
    point, the rest is kept inside: shots may be tried again and again at one point, when something fails.
    """
    lengths = dwell_lengths([shot.changed for shot in run.shots[stretch.start + 1 : stretch.stop]])
    usual = median_low(lengths)
    if max(lengths[1:-1], default=0) <= usual:
        return [stretch]
    points = run.points(axes, stretch.start, stretch.stop)
    before = run.points(axes, stretch.start - 1, stretch.start)
    bounds = [stretch.start]
    place = lengths[0]
    for length in lengths[1:-1]:
        point = points[place]
        long = length > max(4, 3 * usual)
        if long or (length > usual and [point] == before):
            visits = Counter(points[:place] + points[place + length :])
            if (long or point not in visits) and wanted_shots(visits, point) == 0:
                bounds += [stretch.start + place, stretch.start + place + length]
        place += length
    bounds.append(stretch.stop)
    parts = zip(bounds[::2], bounds[1::2], strict=True)
    return [Stretch(start, stop, moved_names(run.shots, start, stop)) for start, stop in parts]


def trim(run: Run, stretch: Stretch, axes: Sequence[str]) -> Stretch:
    """Return a scan without the shots at its ends that were only taken at the settings found or left there.

    Those are shots at one point which did not move to it, or which the next shots after the scan still
    sit at, and which the rest of the scan does not lack. Where the same point was set before the scan, a
    point lacked is sought there, see `extend`.
    """
    lengths = dwell_lengths([shot.changed for shot in run.shots[stretch.start + 1 : stretch.stop]])
    if len(lengths) < 3:
        return stretch
    head, tail, usual = lengths[0], lengths[-1], median_low(lengths)
    points = run.points(axes, stretch.start, stretch.stop)
    rest = points[head:-tail]
    stays_before = _stays(run, stretch, stretch.start, head, points[0] not in rest)
    stays_after = _stays(run, stretch, stretch.stop, tail, points[-1] not in rest)
    begin, end = points[:head], points[-tail:]
    if stays_before:
        begin = begin[: _kept(rest if stays_after else rest + end, begin[0], head, usual)]
    found_there = stretch.start > run.first and run.shots[stretch.start].changed <= stretch.moving
    if stays_after and found_there and run.points(axes, stretch.start - 1, stretch.start) == end[:1]:
        end = []
    elif stays_after:
        end = end[: _kept(begin + rest, end[0], tail, usual)]
    start, stop = stretch.start + head - len(begin), stretch.stop - tail + len(end)
    return Stretch(start, stop, moved_names(run.shots, start, stop))


def _stays(run: Run, stretch: Stretch, place: int, length: int, strange: bool) -> bool:
    """Return whether settings did not move across one end of a scan (or may not have: nothing is there)."""
    if 0 < place < len(run.shots):
        return not run.shots[place].changed & stretch.moving
    return length >= 2 or strange


def _kept(others: Sequence[Point], point: Point, length: int, usual: int) -> int:
    wanted = wanted_shots(Counter(others), point)
    if wanted is None:
        return length if length <= usual else 0
    return min(length, wanted)


def extend(run: Run, stretch: Stretch, axes: Sequence[str], free: int) -> Stretch:
    """Return a scan together with shots just before it that its first point lacks, back to shot `free`.

    So a scan whose first point is the setting found there still has that point.
    """
    start = stretch.start
    if start <= free or not run.shots[start].changed <= stretch.moving:
        return stretch
    visits = Counter(run.points(axes, start, stretch.stop))
    wanted = wanted_shots(visits, run.points(axes, start - 1, start)[0]) or 0
    while wanted > 0 and start > free:
        start -= 1
        wanted -= 1
        if run.shots[start].changed:
            break
    return Stretch(start, stretch.stop, stretch.moving)


def is_in_order(column: Sequence[float | str]) -> bool:
    """Return whether at least 5 distinct numbers were taken in rising or falling order, repeats or not."""
    numbers = [each for each in column if not isinstance(each, str)]
    if len(numbers) < len(column) or len(set(numbers)) < 5:
        return False
    return numbers in (sorted(numbers), sorted(numbers, reverse=True))


def is_set_apart(run: Run, start: int, free: int) -> bool:
    """Return whether a scan that begins at `start` has shots at rest, another scan or nothing before it.

    `free` is the first shot of the run that is in no scan; fewer than 4 shots at rest are looked through.
    """
    quiet = 0
    while start - 1 - quiet > free and not run.shots[start - 1 - quiet].changed:
        quiet += 1
    return quiet + 1 >= 4 or start - quiet - 1 <= free
