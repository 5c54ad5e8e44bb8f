"""How settings differ between the shots of one version of a sequence, counted by the database."""

from __future__ import annotations

from collections.abc import Collection, Iterable
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import ColumnElement, Connection, and_, func, or_, select, union

from nightfold import tables
from nightfold.ledger.edits import changes_by_hand
from nightfold.ledger.rows import chunks
from nightfold.timestamps import from_us


@dataclass(frozen=True, slots=True)
class Spread:
    """How a setting differs between shots.

    Attributes
    ----------
    values : int
        How many different values there are, two at least.
    low, high : float or None
        The smallest and the largest number; None for texts.
    words : tuple of str
        The two texts, where there are just two.
    swept : bool
        Whether a scan varied it.
    edits : int
        How often a person changed it.
    changed : datetime or None
        When it was last varied by a scan or changed by a person; None where it changes by itself, from shot to shot.
    """

    values: int
    low: float | None
    high: float | None
    words: tuple[str, ...]
    swept: bool
    edits: int
    changed: datetime | None


def of_versions(sequence_id: int, version_ids: Collection[int | None]) -> ColumnElement[bool]:
    """Return the condition that a shot is of a sequence and one of these versions, None standing for no steps."""
    shot = tables.shot
    known = [number for number in version_ids if number is not None]
    version: ColumnElement[bool] = shot.c.version_id.in_(known)
    if None in version_ids:
        version = or_(version, shot.c.version_id.is_(None))
    return and_(shot.c.sequence_id == sequence_id, version)


def spreads(
    connection: Connection, sequence_id: int, version_ids: Collection[int | None]
) -> dict[str, Spread]:
    """Return how the settings differ that are not the same at every shot of a version, by the name of the parameter."""
    where = of_versions(sequence_id, version_ids)
    varied = _varied(connection, where)
    if not varied:
        return {}
    swept = _last_swept(connection, where)
    edits: dict[int, list[int]] = {}
    for number, at_us in _edited(connection, sequence_id, version_ids, varied):
        edits.setdefault(number, []).append(at_us)
    found = {}
    for number, (name, values, low, high, words) in varied.items():
        own = edits.get(number, [])
        last = max([*own, *([swept[number]] if number in swept else [])], default=None)
        changed = None if last is None else from_us(last)
        found[name] = Spread(values, low, high, words, number in swept, len(own), changed)
    return found


_Varied = tuple[str, int, float | None, float | None, tuple[str, ...]]


def _varied(connection: Connection, where: ColumnElement[bool]) -> dict[int, _Varied]:
    """Return name, count of values, lowest, highest and the two words of the parameters with several values."""
    shot, rest, move, parameter = tables.shot, tables.set_value, tables.shot_value, tables.parameter
    sets = select(shot.c.set_id).where(where).distinct()
    values = union(
        select(rest.c.parameter_id, rest.c.num, rest.c.exact).where(rest.c.set_id.in_(sets)),
        select(move.c.parameter_id, move.c.num, move.c.exact)
        .join(shot, shot.c.id == move.c.shot_id)
        .where(where),
    ).subquery()
    query = (
        select(
            parameter.c.id, parameter.c.name, parameter.c.kind, func.count().label("values"),
            func.min(values.c.num).label("low"), func.max(values.c.num).label("high"),
            func.min(values.c.exact).label("one"), func.max(values.c.exact).label("other"),
        )
        .join(values, values.c.parameter_id == parameter.c.id)
        .group_by(parameter.c.id, parameter.c.name, parameter.c.kind)
        .having(func.count() > 1)
    )  # fmt: skip
    found: dict[int, _Varied] = {}
    for row in connection.execute(query):
        words = tuple(sorted((row.one, row.other))) if row.kind == "text" and row.values == 2 else ()
        found[row.id] = row.name, int(row.values), row.low, row.high, words
    return found


def _last_swept(connection: Connection, where: ColumnElement[bool]) -> dict[int, int]:
    """Return when each parameter was last varied by a scan: declared swept at a shot, or an axis of its scan."""
    shot, move, axis = tables.shot, tables.shot_value, tables.scan_axis
    declared = (
        select(move.c.parameter_id, func.max(shot.c.started_us))
        .join(shot, shot.c.id == move.c.shot_id)
        .where(where, move.c.swept)
        .group_by(move.c.parameter_id)
    )
    scanned = (
        select(axis.c.parameter_id, func.max(shot.c.started_us))
        .join(shot, shot.c.scan_id == axis.c.scan_id)
        .where(where)
        .group_by(axis.c.parameter_id)
    )
    found: dict[int, int] = {}
    for query in (declared, scanned):
        for number, at_us in connection.execute(query):
            found[number] = max(at_us, found.get(number, at_us))
    return found


def _edited(
    connection: Connection, sequence_id: int, version_ids: Collection[int | None], parameters: Iterable[int]
) -> list[tuple[int, int]]:
    """Return parameter and time of every change by hand that first showed at a shot of these versions."""
    shot = tables.shot
    changes = changes_by_hand(connection, sequence_id, set(parameters))
    own: set[int] = set()
    for part in chunks(sorted({at_us for _, at_us in changes})):
        query = select(shot.c.started_us).where(
            of_versions(sequence_id, version_ids), shot.c.started_us.in_(part)
        )
        own |= set(connection.execute(query).scalars())
    return [(number, at_us) for number, at_us in changes if at_us in own]
