"""Sequences: their versions by structure, the steps of one in time, and what differs between shots."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Row, Select, func, select

from nightfold import tables
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.amending import stored_settings
from nightfold.ledger.comparing import Run, SettingChange, Stated, StepChange, compare_runs
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import find_machine, near_miss
from nightfold.ledger.setting_aside import find_shots
from nightfold.ledger.spreads import of_versions, spreads
from nightfold.ledger.structure import DURATION, StepNames, parse_structure, seconds_per
from nightfold.ledger.timeline import Timeline, make_timeline, run_seconds
from nightfold.settings import plain_value
from nightfold.timestamps import from_us, to_us, utc_times

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    from numpy.typing import NDArray

    from nightfold.session import Session


@dataclass(frozen=True, slots=True)
class SequenceVersion:
    """A version of a sequence: its structure, and which shots ran it.

    Attributes
    ----------
    number : int
        From 1, in the order of first use.
    steps : tuple of StepNames or None
        Names of steps and settings; None where the shots name the sequence and state no steps.
    shots : int
        How many shots ran it, those set aside included.
    first, last : datetime
        When its first and its last shot started.
    """

    number: int
    steps: tuple[StepNames, ...] | None
    shots: int
    first: datetime
    last: datetime
    _ids: tuple[int | None, ...] = field(repr=False)


@dataclass(frozen=True, slots=True)
class ComparedShot:
    """One side of a comparison: the shot, the version it ran, and how long it took (seconds, NaN if unknown)."""

    version: int
    uid: str
    started: datetime
    duration_s: float


@dataclass(frozen=True, slots=True)
class Comparison:
    """What differs between two shots of a sequence, and nothing else.

    Attributes
    ----------
    old, new : ComparedShot
    steps : tuple of StepChange
        In the order of the sequence; those removed where they stood.
    others : tuple of SettingChange
        Of the settings that belong to no step.
    renumbered : tuple of (str, str)
        Repeated steps that are the same but count differently, such as ``("evaporate#3", "evaporate#2")``.
    """

    old: ComparedShot
    new: ComparedShot
    steps: tuple[StepChange, ...]
    others: tuple[SettingChange, ...]
    renumbered: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class SequenceView:
    """A sequence of a machine: its versions, and on request a shot of it in time, or two compared."""

    name: str
    machine: str
    versions: tuple[SequenceVersion, ...]
    _id: int = field(repr=False)
    _session: Session = field(repr=False, compare=False)

    def version(self, number: int) -> SequenceVersion:
        """Return a version by its number.

        Raises
        ------
        NotFound
        """
        if not 1 <= number <= len(self.versions):
            known = "version 1" if len(self.versions) == 1 else f"versions 1 to {len(self.versions)}"
            raise NotFound(f"version {number} of sequence {self.name!r}: it has {known}")
        return self.versions[number - 1]

    def timeline(self, version: int | None = None, *, shot: str | None = None) -> Timeline:
        """Return the steps of a shot in time, with their settings and how these differ between shots of the version.

        Parameters
        ----------
        version : int, optional
            Show its newest shot; by default that of the version used last.
        shot : str, optional
            Show this shot, by its uid or the beginning of it.

        Raises
        ------
        NotFound
            If there is no such version, or no such shot of this sequence.
        """
        with self._session.reading() as connection:
            row, ran = self._find(connection, version if shot is None else shot)
            if version is not None and version != ran.number:
                raise NotFound(f"shot {row.uid!r}: it ran version {ran.number}, wanted {version}")
            spread = spreads(connection, self._id, ran._ids)
            run = _run(connection, row, ran)
        return make_timeline(ran.number, row.uid, from_us(row.started_us), run, spread)

    def compare(self, old: int | str, new: int | str | None = None) -> Comparison:
        """Return what differs between two shots.

        Parameters
        ----------
        old, new : int or str
            The number of a version, for its newest shot, or the uid of a shot. Without `new`: the newest shot.

        Raises
        ------
        NotFound
            If there is no such version, or no such shot of this sequence.
        """
        with self._session.reading() as connection:
            sides = [self._find(connection, key) for key in (old, new)]
            runs = [_run(connection, row, ran) for row, ran in sides]
        steps, others, renumbered = compare_runs(*runs)
        before, after = (
            ComparedShot(ran.number, row.uid, from_us(row.started_us), run_seconds(run))
            for (row, ran), run in zip(sides, runs, strict=True)
        )
        return Comparison(before, after, tuple(steps), tuple(others), tuple(renumbered))

    def _find(self, connection: Connection, key: int | str | None) -> tuple[Row[Any], SequenceVersion]:
        """Return a shot and the version it ran: by uid, the newest of a version, or the newest of all."""
        if isinstance(key, str):
            row = find_shots(connection, [key])[key]
            if row.sequence_id != self._id:
                raise NotFound(f"shot {row.uid!r}: it ran another sequence, wanted one of {self.name!r}")
        else:
            ids = [n for item in self.versions for n in item._ids] if key is None else self.version(key)._ids
            shot = tables.shot
            query = select(shot).where(of_versions(self._id, ids))
            row = connection.execute(
                query.order_by(shot.c.started_us.desc(), shot.c.id.desc()).limit(1)
            ).one()
        return row, next(item for item in self.versions if row.version_id in item._ids)


def list_sequences(connection: Connection, machine: str | None = None) -> pd.DataFrame:
    """Return a row a sequence: machine, sequence, versions, shots, first, last (UTC).

    Raises
    ------
    NotFound
        If the machine is not in the store.
    """
    import numpy as np
    import pandas as pd

    rows = connection.execute(_named(connection, machine)).all()
    versions = _versions(connection, None if machine is None else [row.id for row in rows])
    listed = sorted((row.machine, row.name, versions[row.id]) for row in rows if row.id in versions)
    frame = pd.DataFrame(
        {
            "machine": [name for name, _, _ in listed],
            "sequence": [name for _, name, _ in listed],
            "versions": np.array([len(own) for _, _, own in listed], dtype=np.int64),
            "shots": np.array([sum(item.shots for item in own) for _, _, own in listed], dtype=np.int64),
        }
    )
    ends = [(min(item.first for item in own), max(item.last for item in own)) for _, _, own in listed]
    for column, moments in (("first", [end[0] for end in ends]), ("last", [end[1] for end in ends])):
        frame[column] = utc_times(np.array([to_us(moment) for moment in moments], dtype=np.int64))
    return frame


def view_sequence(session: Session, name: str, machine: str | None = None) -> SequenceView:
    """Return a sequence with its versions.

    Raises
    ------
    NotFound
        If the machine, or a sequence of that name, is not in the store.
    ChoiceNeeded
        If several machines have a sequence of that name.
    """
    with session.reading() as connection:
        row = _find_sequence(connection, name, machine)
        versions = _versions(connection, [row.id])[row.id]
    return SequenceView(row.name, row.machine, versions, row.id, session)


def _find_sequence(connection: Connection, name: str, machine: str | None) -> Row[Any]:
    has_shots = select(tables.shot.c.id).where(tables.shot.c.sequence_id == tables.sequence.c.id).exists()
    rows = connection.execute(_named(connection, machine).where(has_shots)).all()
    own = [row for row in rows if row.name == name]
    if not own:
        place = "in this store" if machine is None else f"of {machine}"
        raise NotFound(f"sequence {name!r}: not {place}; {near_miss(name, {row.name for row in rows})}")
    if len(own) > 1:
        machines = ", ".join(sorted(row.machine for row in own))
        raise ChoiceNeeded(f"sequence {name!r}: of several machines ({machines}); name the machine")
    return own[0]


def _named(connection: Connection, machine: str | None) -> Select[Any]:
    """Return the query for id, name and machine of all sequences, or those of one machine."""
    sequence = tables.sequence
    query: Select[Any] = select(sequence.c.id, sequence.c.name, tables.machine.c.name.label("machine")).join(
        tables.machine, tables.machine.c.id == sequence.c.machine_id
    )
    if machine is None:
        return query
    return query.where(sequence.c.machine_id == find_machine(connection, machine).id)


def _versions(
    connection: Connection, sequence_ids: Sequence[int] | None
) -> dict[int, tuple[SequenceVersion, ...]]:
    """Return the versions of sequences in the order of first use; those that state the same are one."""
    shot, version = tables.shot, tables.version
    counted = select(
        shot.c.sequence_id, shot.c.version_id, func.count().label("shots"),
        func.min(shot.c.started_us).label("first"), func.max(shot.c.started_us).label("last"),
    ).group_by(shot.c.sequence_id, shot.c.version_id)  # fmt: skip
    written = select(version.c.id, version.c.structure)
    if sequence_ids is not None:
        counted = counted.where(shot.c.sequence_id.in_(sequence_ids))
        written = written.where(version.c.sequence_id.in_(sequence_ids))
    steps = {row.id: parse_structure(row.structure) for row in connection.execute(written)}
    alike: dict[int, dict[Any, list[Row[Any]]]] = {}
    for row in sorted(connection.execute(counted), key=lambda row: (row.first, row.version_id or 0)):
        key = None if row.version_id is None else tuple(step.key for step in steps[row.version_id])
        alike.setdefault(row.sequence_id, {}).setdefault(key, []).append(row)
    return {
        sequence_id: tuple(_version(number, rows, steps) for number, rows in enumerate(own.values(), 1))
        for sequence_id, own in alike.items()
    }


def _version(
    number: int, rows: Sequence[Row[Any]], steps: Mapping[int, tuple[StepNames, ...]]
) -> SequenceVersion:
    first, last = min(row.first for row in rows), max(row.last for row in rows)
    stated = None if rows[0].version_id is None else steps[rows[0].version_id]
    shots = sum(row.shots for row in rows)
    ids = tuple(row.version_id for row in rows)
    return SequenceVersion(number, stated, shots, from_us(first), from_us(last), ids)


def _run(connection: Connection, row: Row[Any], ran: SequenceVersion) -> Run:
    stored = stored_settings(connection, row.id, row.set_id)
    return Run(
        ran.steps or (),
        {
            name: Stated(plain_value(kind, num, exact), unit or "")
            for name, (kind, unit, num, exact, _) in stored.items()
        },
    )


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
