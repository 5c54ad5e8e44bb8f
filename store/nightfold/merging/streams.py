"""The sequences of two machines become those of one: versions, rounds of labels, and scans folded again."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

from sqlalchemy import Connection, Row, func, or_, select, update

from nightfold import tables
from nightfold.ledger.names import MachineNames
from nightfold.merging.rows import point_to
from nightfold.scans.assigning import DEFAULT_REJOIN_US, rejoin_times
from nightfold.scans.refolding import FARTHEST_US, fold_span
from nightfold.scans.rounds import fold_label

_PIECE = 500
Progress = Callable[[int], None]


def join_sequences(connection: Connection, old: MachineNames, into: MachineNames) -> dict[int, int]:
    """Make sequences of one machine the other's; return for each its id from now on."""
    shared = {
        old.sequences[name]: into.sequences[name] for name in old.sequences.keys() & into.sequences.keys()
    }
    _keep_rounds_apart(connection, shared)
    versions = {
        version_id: into.versions[shared[sequence_id], digest]
        for (sequence_id, digest), version_id in old.versions.items()
        if sequence_id in shared and (shared[sequence_id], digest) in into.versions
    }
    point_to(connection, tables.version, versions)
    point_to(connection, tables.sequence, shared)
    table = tables.sequence
    connection.execute(update(table).where(table.c.machine_id == old.id).values(machine_id=into.id))
    return {number: shared.get(number, number) for number in old.sequences.values()}


def _keep_rounds_apart(connection: Connection, shared: Mapping[int, int]) -> None:
    """Give the rounds of labels that both sequences use numbers of their own, until folding numbers them by time."""
    scan = tables.scan
    for ours, theirs in shared.items():
        highest = select(scan.c.label, func.max(scan.c.round)).where(scan.c.sequence_id == theirs)
        for label, number in connection.execute(highest.group_by(scan.c.label)).all():
            own = select(scan.c.id, scan.c.round).where(scan.c.sequence_id == ours, scan.c.label == label)
            for row in connection.execute(
                own.order_by(scan.c.round.desc())
            ).all():  # highest first: out of the way
                connection.execute(update(scan).where(scan.c.id == row.id).values(round=row.round + number))


def own_shots(connection: Connection, machine_id: int) -> dict[int, list[Row[Any]]]:
    """Return the shots of a machine that folding has a say in, by sequence and in time order: id, time, label."""
    shot, scan, sequence = tables.shot, tables.scan, tables.sequence
    query = (
        select(shot.c.id, shot.c.started_us, shot.c.sequence_id, scan.c.label)
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .outerjoin(scan, scan.c.id == shot.c.scan_id)
        .where(sequence.c.machine_id == machine_id, or_(~shot.c.reference, scan.c.label.isnot(None)))
        .order_by(shot.c.started_us, shot.c.id)
    )
    rows: list[Row[Any]] = list(connection.execute(query))
    found: dict[int, list[Row[Any]]] = {}
    for row in rows:
        found.setdefault(row.sequence_id, []).append(row)
    return found


def fold_again(
    connection: Connection,
    into: MachineNames,
    moved: Mapping[int, list[Row[Any]]],
    labels: Mapping[int, set[str]],
    progress: Progress | None,
) -> None:
    """Fold the streams again around the shots that came into them, as if they had come late.

    Parameters
    ----------
    moved : mapping of sequence id to shots
        As `own_shots` gives them.
    labels : mapping of sequence id to labels
        All labels of these sequences' scans.
    """
    rejoin_us = rejoin_times(connection).get(into.id, DEFAULT_REJOIN_US)
    done = 0
    for sequence_id, shots in moved.items():
        fresh = {row.id for row in shots}
        for label in sorted(labels.get(sequence_id, ())):
            fold_label(connection, sequence_id, label, rejoin_us, fresh)
        for piece in _pieces([row for row in shots if row.label is None]):
            first_us, last_us = piece[0].started_us, piece[-1].started_us
            fold_span(connection, sequence_id, first_us, last_us, fresh={row.id for row in piece})
            done += len(piece)
            if progress is not None:
                progress(done)


def _pieces(shots: list[Row[Any]]) -> Iterator[list[Row[Any]]]:
    """Yield shots in pieces, cut where folding would not look across."""
    piece: list[Row[Any]] = []
    for row in shots:
        if piece and (len(piece) == _PIECE or row.started_us - piece[-1].started_us > FARTHEST_US):
            yield piece
            piece = []
        piece.append(row)
    if piece:
        yield piece
