"""Bringing scans up to date when settings of their shots were corrected, or are derived otherwise."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.errors import RequestError
from nightfold.ledger.deriving import derived_quantities
from nightfold.ledger.pins import kept_scans
from nightfold.ledger.rows import chunks
from nightfold.scans.keeping import leading_axes, settle_axes
from nightfold.scans.refolding import FARTHEST_US, fold_span
from nightfold.scans.rounds import swept_of

if TYPE_CHECKING:
    from nightfold.formulas.definitions import Derived
    from nightfold.scans.scan import Scan


def check_unswept(scan: Scan, stated: Mapping[Any, Any]) -> None:
    """Refuse to give a parameter that moves in a scan one value for all its shots.

    Raises
    ------
    RequestError
    """
    points = {axis.parameter: axis.points for axis in scan.axes}
    for name, value in stated.items():
        if isinstance(value, Mapping) and value.keys() & {"times", "plus"}:
            continue
        if points.get(name, 0) > 1:
            moves = f"is an axis of it, with {points[name]} values"
        elif name in scan.followers:
            moves = f"moves along with its axis {scan.followers[name]}"
        else:
            continue
        raise RequestError(
            f"scan {scan.key}: {name} {moves}; one value for all its shots would lose them. "
            f"Name the shots that had it, correct by a factor or an offset, or say even-if-swept"
        )


def follow_corrections(connection: Connection, shots: Sequence[Row[Any]]) -> None:
    """Settle the axes of the scans of corrected shots again, and fold the stream again around those without a label."""
    scan = tables.scan
    labelled: set[int] = set()
    scan_ids = sorted({shot.scan_id for shot in shots if shot.scan_id is not None})
    for part in chunks(scan_ids):
        query = select(scan.c.id).where(scan.c.id.in_(part), scan.c.label.isnot(None))
        labelled.update(connection.execute(query).scalars())
    for scan_id in sorted(labelled):
        settle_axes(connection, scan_id, swept_of(connection, scan_id))
    free: dict[int, list[Row[Any]]] = {}
    for shot in shots:
        if shot.scan_id not in labelled and not shot.reference:
            free.setdefault(shot.sequence_id, []).append(shot)
    for sequence_id, own in free.items():
        for near in _near_each_other(own):
            times = [shot.started_us for shot in near]
            fold_span(connection, sequence_id, min(times), max(times), fresh={shot.id for shot in near})
    for scan_id in sorted(
        kept_scans(connection).intersection(scan_ids) - labelled
    ):  # folding leaves them alone
        axes = [*leading_axes(connection, scan_id), *swept_of(connection, scan_id)]
        settle_axes(connection, scan_id, list(dict.fromkeys(axes)))


def follow_card(connection: Connection, machine_id: int, before: Mapping[str, Derived]) -> None:
    """Look again at shots that declare a derived parameter as swept which the card in force derives otherwise.

    Parameters
    ----------
    before : mapping
        The machine's derived quantities by the card before.
    """
    now = derived_quantities(connection).get(machine_id, {})
    changed = [name for name, derived in before.items() if now.get(name) != derived]
    if not changed:
        return
    shot, declared, parameter = tables.shot, tables.swept_derived, tables.parameter
    own = (
        select(declared.c.shot_id)
        .join(parameter, parameter.c.id == declared.c.parameter_id)
        .where(parameter.c.machine_id == machine_id, parameter.c.name.in_(changed))
    )
    follow_corrections(connection, connection.execute(select(shot).where(shot.c.id.in_(own))).all())


def _near_each_other(shots: Iterable[Row[Any]]) -> list[list[Row[Any]]]:
    """Return the shots in groups that lie further apart than folding looks."""
    groups: list[list[Row[Any]]] = []
    for shot in sorted(shots, key=lambda shot: shot.started_us):
        if groups and shot.started_us - groups[-1][-1].started_us <= FARTHEST_US:
            groups[-1].append(shot)
        else:
            groups.append([shot])
    return groups
