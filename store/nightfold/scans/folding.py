"""Finding scans among the unlabelled shots of one stream.

The rules, in the order in which they act:

1. A pause (`pause_limit_us`) ends a scan, and so does a change of what shots declare as swept.
2. Shots that declare what they sweep are one scan until another parameter is edited (`declared`).
3. Other shots are cut into stretches in which the same few settings move (`segments`), rows are joined into
   nested scans (`rows`), and shots at nominal settings are taken off the ends (`edges`).
4. What remains is a scan if it has at least 4 shots, at least 3 points along one axis and at most 4 axes, and
   if its points were visited again or held about equally long each. A short one whose points are neither
   evenly spaced nor in order must also be set apart from what was done before it, or it may be hand tuning.
   Everything else belongs to no scan.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from statistics import median_low

from nightfold.scans.axes import choose_axes
from nightfold.scans.declared import cut_at_edits
from nightfold.scans.edges import (
    extend,
    is_in_order,
    is_regular,
    is_set_apart,
    split_at_rests,
    trim,
)
from nightfold.scans.patterns import MOST_AXES, dwell_lengths, is_steady
from nightfold.scans.rows import join_rows
from nightfold.scans.stream import FoundScan, Run, StreamShot
from nightfold.scans.stretches import Stretch, find_stretches

__all__ = ["FoundScan", "StreamShot", "fold_stream", "pause_limit_us"]

TOLL = 8.0
"""Price of a new stretch, in shots times moving settings: an edit is told from a scan by 8 shots or so."""

FEWEST_SHOTS = 4
FEWEST_POINTS = 3
SAMPLE = 128
SHORTEST_PAUSE_US = 300_000_000


def pause_limit_us(started_us: Sequence[int]) -> int:
    """Return the longest interval between shots that is no pause yet: ten median ones, at least 5 minutes."""
    intervals = [later - earlier for earlier, later in pairwise(started_us)]
    return max(10 * median_low(intervals), SHORTEST_PAUSE_US) if intervals else SHORTEST_PAUSE_US


def fold_stream(shots: Sequence[StreamShot], *, pause_us: int | None = None) -> list[FoundScan]:
    """Return the scans among the shots of one stream, in order; no shot is in two of them.

    Parameters
    ----------
    shots : sequence of StreamShot
        In order of start, without labelled and reference shots; shots set aside are in.
    pause_us : int, optional
        Longest interval that is not yet a pause, microseconds; default `pause_limit_us` of these shots.

    Notes
    -----
    Shots that come later can still change the scan they continue, and the few shots where one scan passes
    into the next, but not scans before that, as long as the pause limit stays the same.
    """
    limit = pause_limit_us([shot.started_us for shot in shots]) if pause_us is None else pause_us
    found: list[FoundScan] = []
    for start, stop in _runs(shots, limit):
        if shots[start].swept:
            axes = tuple(sorted(shots[start].swept))
            parts = cut_at_edits(shots, start, stop)
            found.extend(FoundScan(_ids(shots, *part), axes, "declared") for part in parts)
        else:
            found.extend(_find(Run(shots, start, stop)))
    return found


def _ids(shots: Sequence[StreamShot], start: int, stop: int) -> tuple[int, ...]:
    return tuple(shot.id for shot in shots[start:stop])


def _runs(shots: Sequence[StreamShot], limit: int) -> list[tuple[int, int]]:
    """Return the stretches of shots without a pause and with one declared swept set."""
    bounds = [
        k
        for k, (earlier, later) in enumerate(pairwise(shots), start=1)
        if later.started_us - earlier.started_us > limit or later.swept != earlier.swept
    ]
    return list(pairwise([0, *bounds, len(shots)])) if shots else []


def _find(run: Run) -> list[FoundScan]:
    """Return the scans in a run of shots that declare nothing."""
    found: list[FoundScan] = []
    free = run.first
    for stretch in join_rows(run.shots, find_stretches(run.shots, run.first, run.stop, TOLL)):
        for part in _parts(run, stretch):
            axes = _axes(run, part)
            scan = extend(run, part, axes, free)
            if _is_scan(run, scan, axes) and (
                _is_clear(run, scan, axes) or is_set_apart(run, scan.start, free)
            ):
                found.append(FoundScan(_ids(run.shots, scan.start, scan.stop), axes, "found"))
                free = scan.stop
    return found


def _parts(run: Run, stretch: Stretch) -> list[Stretch]:
    """Return what remains of a stretch without shots at rest before, after and within it."""
    if not stretch.moving:
        return []
    axes = _axes(run, stretch)
    if not axes:
        return []
    parts = split_at_rests(run, trim(run, stretch, axes), axes)
    return [trim(run, part, axes) for part in parts] if len(parts) > 1 else parts


def _axes(run: Run, stretch: Stretch) -> tuple[str, ...]:
    """Return the parameters swept in a stretch; none where far too many moved on their own."""
    names = sorted(stretch.moving)
    if len(names) == 1:
        return (names[0],)
    if len(names) > 2 * MOST_AXES and len(stretch) > SAMPLE:
        axes, _ = choose_axes(run.columns(names, stretch.start, stretch.start + SAMPLE), ())
        if len(axes) > 2 * MOST_AXES:
            return ()
    return choose_axes(run.columns(names, stretch.start, stretch.stop), ())[0]


def _is_scan(run: Run, scan: Stretch, axes: Sequence[str]) -> bool:
    """Return whether a stretch has shots and points enough, and held its points as scans do."""
    if len(scan) < FEWEST_SHOTS or not 0 < len(axes) <= MOST_AXES:
        return False
    points = run.points(axes, scan.start, scan.stop)
    if max(len(set(column)) for column in zip(*points, strict=True)) < FEWEST_POINTS:
        return False
    lengths = dwell_lengths([shot.changed for shot in run.shots[scan.start + 1 : scan.stop]])
    return len(lengths) > len(set(points)) or is_steady(lengths)


def _is_clear(run: Run, scan: Stretch, axes: Sequence[str]) -> bool:
    """Return whether a scan cannot be taken for hand tuning, whatever stands before it.

    It is long, or its points are evenly spaced, in order, or were visited more than once.
    """
    if len(scan) >= TOLL:
        return True
    points = run.points(axes, scan.start, scan.stop)
    columns = [list(column) for column in zip(*points, strict=True)]
    lengths = dwell_lengths([shot.changed for shot in run.shots[scan.start + 1 : scan.stop]])
    return any(is_regular(list(set(column))) or is_in_order(column) for column in columns) or (
        len(lengths) >= 2 * len(set(points))
    )
