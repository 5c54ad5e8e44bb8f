"""Sequences: their versions by structure, the steps of one, and what differs between shots."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, select

from nightfold import tables
from nightfold.ledger.rows import chunks
from nightfold.ledger.structure import DURATION, parse_structure, seconds_per

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


def shot_durations(connection: Connection, rows: Sequence[Any]) -> NDArray[np.float64]:
    """Return how long each shot took: the sum of the durations of its steps.

    Parameters
    ----------
    connection : Connection
    rows : sequence of rows
        Shots, with ``id`` and ``set_id``.

    Returns
    -------
    (n,) float array, seconds
        NaN where a sequence has no steps, or a step no duration in a unit of time.
    """
    import numpy as np

    version_of = _versions_of(connection, [row.id for row in rows])
    timed = _duration_parameters(connection, set(version_of.values()))
    factors = {number: factor for own in timed.values() for number, factor in own.items()}
    resting = _resting(connection, {row.set_id for row in rows}, factors)
    moving = _moving(connection, [row.id for row in rows if row.id in version_of], factors)
    return np.array(
        [
            _total(timed.get(version_of.get(row.id, 0)), resting.get(row.set_id, {}), moving.get(row.id, {}))
            for row in rows
        ],
        dtype=np.float64,
    )


def _total(wanted: Mapping[int, float] | None, rest: Mapping[int, float], move: Mapping[int, float]) -> float:
    """Return the sum over the duration parameters of a version, NaN where one is missing."""
    if not wanted:
        return math.nan
    return math.fsum(move[n] if n in move else rest.get(n, math.nan) for n in wanted)


def _versions_of(connection: Connection, shot_ids: Sequence[int]) -> dict[int, int]:
    """Return the version of each shot that has steps."""
    shot = tables.shot
    query = select(shot.c.id, shot.c.version_id).where(shot.c.version_id.isnot(None))
    return {
        row.id: row.version_id
        for part in chunks(shot_ids)
        for row in connection.execute(query.where(shot.c.id.in_(part)))
    }


def _duration_parameters(connection: Connection, version_ids: set[int]) -> dict[int, dict[int, float]]:
    """Return the duration of every step of each version, as parameter id and seconds per unit.

    A version with a step that never has a duration is left out.
    """
    version, sequence, parameter = tables.version, tables.sequence, tables.parameter
    query = select(version.c.id, version.c.structure, sequence.c.machine_id).join(
        sequence, sequence.c.id == version.c.sequence_id
    )
    found: dict[int, dict[int, float]] = {}
    for row in connection.execute(query.where(version.c.id.in_(version_ids))).all():
        steps = parse_structure(row.structure)
        names = {step.parameter(DURATION) for step in steps}
        own = connection.execute(
            select(parameter.c.id, parameter.c.unit).where(
                parameter.c.machine_id == row.machine_id, parameter.c.name.in_(names)
            )
        ).all()
        if all(step.timed for step in steps) and len(own) == len(names):
            found[row.id] = {number: seconds_per(unit) for number, unit in own}
    return found


def _resting(
    connection: Connection, set_ids: set[int], factors: Mapping[int, float]
) -> dict[int, dict[int, float]]:
    rest, found = tables.set_value, dict[int, dict[int, float]]()
    query = select(rest.c.set_id, rest.c.parameter_id, rest.c.num).where(rest.c.parameter_id.in_(factors))
    for part in chunks(sorted(set_ids)):
        for set_id, number, num in connection.execute(query.where(rest.c.set_id.in_(part))):
            found.setdefault(set_id, {})[number] = math.nan if num is None else num * factors[number]
    return found


def _moving(
    connection: Connection, shot_ids: Sequence[int], factors: Mapping[int, float]
) -> dict[int, dict[int, float]]:
    move, found = tables.shot_value, dict[int, dict[int, float]]()
    query = select(move.c.shot_id, move.c.parameter_id, move.c.num).where(move.c.parameter_id.in_(factors))
    for part in chunks(shot_ids):
        for shot_id, number, num in connection.execute(query.where(move.c.shot_id.in_(part))):
            found.setdefault(shot_id, {})[number] = math.nan if num is None else num * factors[number]
    return found
