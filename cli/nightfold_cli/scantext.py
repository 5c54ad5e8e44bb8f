"""What a scan is, in a few words."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import TYPE_CHECKING, Any

from nightfold.concise import short

if TYPE_CHECKING:
    from nightfold.scans.axes import Axis
    from nightfold.scans.scan import Scan

_VALUES = 4


def span(axis: Axis) -> str:
    """Return the range of an axis: ``60.5…62.5 A``, or the values of one made of words."""
    if axis.low is None or axis.high is None:
        words = [str(value) for value in axis.values]
        return ", ".join(words[:_VALUES]) + (" …" if len(words) > _VALUES else "")
    ends = short(axis.low) if axis.low == axis.high else f"{short(axis.low)}…{short(axis.high)}"
    return f"{ends} {axis.unit}".rstrip() if axis.unit else ends


def axis_line(axis: Axis) -> str:
    """Return an axis in full: ``coil_current 60.5…62.5 A``."""
    return f"{axis.parameter} {span(axis)}"


def grid(scan: Scan) -> str:
    """Return the number of points: ``41``, ``11x9``; that of the shots where they are scattered."""
    if scan.scattered:
        return str(scan.shots)
    return "x".join(str(axis.points) for axis in scan.axes) or "1"


_MARKS = {"rising": "↑", "falling": "↓"}


def order_mark(scan: Scan, axis: Axis) -> str:
    """Return an arrow if the points of an axis were taken in order, else nothing."""
    return _MARKS.get(scan.order.get(axis.parameter, ""), "")


def order_line(scan: Scan, values: Sequence[float] = ()) -> str:
    """Return what to know about the order in which the points were taken; nothing where it was mixed.

    Parameters
    ----------
    values : sequence of float
        Of the only axis, one a shot in time order; empty where there are several.
    """
    found = [f"{order} {name}" for name, order in scan.order.items() if order != "mixed"]
    if not found:
        return ""
    back = -1 if "rising" in scan.order.values() else 1
    steps = [back * (later - one) for one, later in pairwise(values)]
    passes = 1 + sum(step > max(map(abs, steps)) / 2 for step in steps)
    if passes > 1:
        return f"{found[0]}, {passes} times over: drift from one pass to the next shows as scatter"
    return f"in order of {' and of '.join(found)}: drift would look like a feature; better shuffle the points"


def counted(count: int, what: str) -> str:
    """Return a number of things: ``1 point``, ``31 points``."""
    return f"{count} {what}" if count == 1 else f"{count} {what}s"


def repeats(scan: Scan) -> float:
    """Return shots for each point of the grid."""
    points: int = math.prod(axis.points for axis in scan.axes) or 1
    return 1.0 if scan.scattered else float(scan.shots / points)


def repeats_text(scan: Scan) -> str:
    """Return the repeats: ``3``, ``2.9``; below one where the grid has holes."""
    return f"{repeats(scan):.2g}" if repeats(scan) < 10 else f"{repeats(scan):.0f}"


def status(scan: Scan) -> str:
    """Return how far the scan has come."""
    return "complete" if scan.complete else "open"


def relative_line(related: Mapping[str, Any]) -> str:
    """Return what readings were divided by: ``to 12 reference shots of hold, every shot within 4.5 min of one``."""
    from nightfold.scans.references import span_text

    shots, distance = related["reference_shots"], span_text(related["reference_distance_s"], up=True)
    of = f" of {related['reference_sequence']}" if shots else ""
    return f"to {counted(shots, 'reference shot')}{of}, every shot within {distance} of one"


def title(scan: Scan, name: str) -> str:
    """Return what stands above a scan: its name, with the label where the name is an id for want of another."""
    return name if scan.label is None or name == scan.key else f"{name} ({scan.key})"


def entry(scan: Scan, name: str, notes: Mapping[str, list[str]]) -> dict[str, Any]:
    """Return a scan, what it is called and what was noted about it, for JSON."""
    return {
        "id": scan.id,
        "label": scan.label,
        "round": scan.round,
        "key": name,
        "machine": scan.machine,
        "sequence": scan.sequence,
        "origin": scan.origin,
        "axes": [axis_entry(axis) for axis in scan.axes],
        "shots": scan.shots,
        "set_aside": scan.set_aside,
        "first": scan.first,
        "last": scan.last,
        "complete": scan.complete,
        "scattered": scan.scattered,
        "order": scan.order,
        "arranged": list(scan.arranged),
        "observables": list(scan.observables),
        "main_observable": scan.main_observable,
        "notes": notes.get(f"scan {scan.id}", []),
    }


def axis_entry(axis: Axis) -> dict[str, Any]:
    """Return an axis for JSON; its values are listed where it is made of words."""
    words = axis.low is None
    return {
        "parameter": axis.parameter,
        "unit": axis.unit or None,
        "points": axis.points,
        "low": axis.low,
        "high": axis.high,
        "values": list(axis.values) if words else None,
    }
