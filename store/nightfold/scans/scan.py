"""A scan as people use it: what was swept, and its shots as a Dataset or a table."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Row, func, select

from nightfold import tables
from nightfold.card import parse_card
from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.names import newest_cards
from nightfold.ledger.selecting import (
    Named,
    Selection,
    named_by_id,
    near_miss,
    reading_columns,
    scan_key,
    select_shots,
    set_aside_now,
    setting_columns,
)
from nightfold.scans.axes import Axis, describe_axis
from nightfold.session import Session
from nightfold.timestamps import from_us, now_us, utc_times

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

IDLE_CYCLES = 5
_FIRST_CYCLE_US = 60_000_000


@dataclass(frozen=True, repr=False)
class Scan:
    """One scan; times are aware, in UTC.

    Attributes
    ----------
    id, round : int
    label : str or None
        None for a scan found by itself.
    key : str
        How the scan is named: ``label#round``, or its id.
    machine, sequence, zone : str
    origin : {'label', 'declared', 'found'}
    axes : tuple of Axis
    followers : dict
        Parameters that move along with an axis, and which.
    shots, set_aside : int
        Shots in results, and those left out.
    first, last : datetime
    complete : bool
        Whether no more shots are expected.
    observables : tuple of str
        Those that at least one shot has, the card's main one first.
    main_observable : str or None
    units : dict
        Unit of every axis, follower and observable.
    """

    id: int
    label: str | None
    round: int
    machine: str
    sequence: str
    zone: str
    origin: str
    axes: tuple[Axis, ...]
    followers: dict[str, str]
    shots: int
    set_aside: int
    first: datetime
    last: datetime
    complete: bool
    observables: tuple[str, ...]
    main_observable: str | None
    units: dict[str, str]
    _session: Session = field(compare=False)

    @property
    def key(self) -> str:
        """How the scan is named: ``label#round``, or its id."""
        return scan_key(self.id, self.label, self.round) or ""

    def __repr__(self) -> str:
        axes = " x ".join(f"{axis.parameter} ({axis.points})" for axis in self.axes) or "no axis"
        return f"<Scan {self.key} of {self.sequence}: {axes}, {self.shots} shots>"

    def table(self, set_aside: bool = False) -> pd.DataFrame:
        """Return a frame with a row a shot, in time order.

        Columns are ``uid``, ``shot_id``, ``started`` (UTC), ``set_aside``, the axes and the parameters that follow one,
        and each observable with its ``<observable>_stderr``; units stand in ``attrs["units"]``.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside.
        """
        with self._session.reading() as connection:
            return _read_table(connection, self, set_aside)

    def dataset(self, set_aside: bool = False, tolerance: float | None = None) -> xr.Dataset:
        """Return the scan on its axes.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside; they are holes otherwise.
        tolerance : float, optional
            Values of an axis closer together than this are one point, in the unit of the axis; default 1e-6 of the
            axis's span.

        Returns
        -------
        Dataset
            Dimensions are the axes, ``repeat`` where a point has several shots, ``cloud`` where there are several;
            a sparse cloud of points has the one dimension ``shot``. Variables are the observables, their ``_stderr``,
            ``started``, ``shot_id``, ``uid`` and ``set_aside``; holes are NaN.
        """
        from nightfold.scans.grid import build_dataset

        frame = self.table(set_aside)
        dataset: xr.Dataset = build_dataset(
            frame,
            [axis.parameter for axis in self.axes],
            co_moving=self.followers,
            observables=self.observables,
            units=self.units,
            descriptions=self._descriptions(),
            attrs={
                "scan": self.key,
                "machine": self.machine,
                "sequence": self.sequence,
                "time_zone": self.zone,
            },
            tolerance=tolerance,
        )
        return dataset

    def _descriptions(self) -> dict[str, str]:
        with self._session.reading() as connection:
            cards = [parse_card(text, source="card") for text in newest_cards(connection).values()]
        card = next((card for card in cards if card.machine == self.machine), None)
        if card is None:
            return {}
        entries = {name: card.parameters.get(name) or card.observable(name) for name in self.units}
        return {name: entry.description for name, entry in entries.items() if entry and entry.description}


def list_scans(session: Session) -> list[Scan]:
    """Return every scan, in the order in which they began."""
    with session.reading() as connection:
        return _read_scans(connection, session, None)


def find_scan(session: Session, key: int | str) -> Scan:
    """Return the scan an id, a label (newest round) or ``label#round`` names.

    Raises
    ------
    NotFound
        If there is none.
    ChoiceNeeded
        If several sequences use the label.
    """
    with session.reading() as connection:
        scan_id = _find_id(connection, key)
        return _read_scans(connection, session, scan_id)[0]


def _find_id(connection: Connection, key: int | str) -> int:
    scan = tables.scan
    rows = list(connection.execute(select(scan.c.id, scan.c.label, scan.c.round, scan.c.sequence_id)))
    if isinstance(key, int) and not isinstance(key, bool):
        found = [row for row in rows if row.id == key]
    else:
        label, mark, number = str(key).rpartition("#")
        found = [row for row in rows if row.label == key]
        if not found and mark and number.isascii() and number.isdigit():
            found = [row for row in rows if row.label == label and row.round == int(number)]
        if not found and str(key).isascii() and str(key).isdigit():
            found = [row for row in rows if row.id == int(key)]
    if not found:
        known = [row.label for row in rows if row.label is not None]
        raise NotFound(
            f"scan {key!r}: not in this store; {near_miss(str(key), dict.fromkeys(known))} ({len(rows)} scans)"
        )
    if len({row.sequence_id for row in found}) > 1:
        choices = ", ".join(str(row.id) for row in found)
        raise ChoiceNeeded(f"scan {key!r}: several sequences use this label; name it by id: {choices}")
    newest = max(found, key=lambda row: row.round)
    return int(newest.id)


def _read_scans(connection: Connection, session: Session, scan_id: int | None) -> list[Scan]:
    scan, shot, sequence, machine = tables.scan, tables.shot, tables.sequence, tables.machine
    query = (
        select(
            scan, sequence.c.name.label("sequence"), machine.c.name.label("machine"), machine.c.zone,
            machine.c.id.label("machine_id"), func.count(shot.c.id).label("taken"),
            func.min(shot.c.started_us).label("first_us"), func.max(shot.c.started_us).label("last_us"),
        )
        .join(shot, shot.c.scan_id == scan.c.id)
        .join(sequence, sequence.c.id == scan.c.sequence_id)
        .join(machine, machine.c.id == sequence.c.machine_id)
        .group_by(scan.c.id, sequence.c.id, machine.c.id)
        .order_by(func.min(shot.c.started_us), scan.c.id)
    )  # fmt: skip
    if scan_id is not None:
        query = query.where(scan.c.id == scan_id)
    rows = list(connection.execute(query))
    if not rows and scan_id is not None:
        raise NotFound(f"scan {scan_id}: it has no shots any more")
    aside = _set_aside_counts(connection, scan_id)
    axes = _axes(connection, rows, scan_id)
    observables = _observables(connection, scan_id)
    newest = _newest_of_sequences(connection)
    mains = _main_observables(connection)
    return [
        _make_scan(
            row, session, aside.get(row.id, 0), axes[row.id], observables.get(row.id, []), newest, mains
        )
        for row in rows
    ]


def _make_scan(
    row: Row[Any],
    session: Session,
    aside: int,
    axes: tuple[tuple[Axis, ...], dict[str, str], dict[str, str]],
    observables: Sequence[tuple[str, str]],
    newest: Mapping[int, int],
    mains: Mapping[int, str],
) -> Scan:
    names = [name for name, _ in observables]
    main = _main_of(names, mains.get(row.machine_id))
    if main is not None:
        names.sort(key=lambda name: (name != main, name))
    found, followers, units = axes
    return Scan(
        id=row.id,
        label=row.label,
        round=row.round,
        machine=row.machine,
        sequence=row.sequence,
        zone=row.zone,
        origin=row.origin,
        axes=found,
        followers=followers,
        shots=row.taken - aside,
        set_aside=aside,
        first=from_us(row.first_us),
        last=from_us(row.last_us),
        complete=_is_complete(row, newest),
        observables=tuple(names),
        main_observable=main,
        units={**units, **dict(observables)},
        _session=session,
    )


def _main_of(names: Sequence[str], wanted: str | None) -> str | None:
    """Return the main observable among those read: the card's, its first cloud, else the first by name."""
    if wanted in names:
        return wanted
    clouds = [name for name in names if wanted is not None and name.startswith(f"{wanted}[")]
    return next(iter([*clouds, *names]), None)


def _is_complete(row: Row[Any], newest: Mapping[int, int]) -> bool:
    """Planned shots reached, said to be the last, overtaken by a later scan of its sequence, or idle for 5 cycles."""
    if row.closed_us is not None or (row.planned_shots is not None and row.taken >= row.planned_shots):
        return True
    if newest[row.sequence_id] > row.last_us:
        return True
    cycle = (row.last_us - row.first_us) / (row.taken - 1) if row.taken > 1 else _FIRST_CYCLE_US
    return bool(now_us() - row.last_us > IDLE_CYCLES * cycle)


def _newest_of_sequences(connection: Connection) -> dict[int, int]:
    """Return when the newest scan of each sequence began."""
    shot = tables.shot
    firsts = (
        select(shot.c.sequence_id, func.min(shot.c.started_us).label("first_us"))
        .where(shot.c.scan_id.isnot(None))
        .group_by(shot.c.sequence_id, shot.c.scan_id)
        .subquery()
    )
    query = select(firsts.c.sequence_id, func.max(firsts.c.first_us)).group_by(firsts.c.sequence_id)
    return dict(connection.execute(query).tuples().all())


def _set_aside_counts(connection: Connection, scan_id: int | None) -> dict[int, int]:
    shot = tables.shot
    query = select(shot.c.scan_id, func.count()).where(shot.c.scan_id.isnot(None), set_aside_now(shot.c.id))
    if scan_id is not None:
        query = query.where(shot.c.scan_id == scan_id)
    return dict(connection.execute(query.group_by(shot.c.scan_id)).tuples().all())


def _observables(connection: Connection, scan_id: int | None) -> dict[int, list[tuple[str, str]]]:
    """Return names and units of the observables of each scan: those of its last shot, or all if one is asked for."""
    shot, reading, observable = tables.shot, tables.reading, tables.observable
    query = (
        select(shot.c.scan_id, observable.c.name, observable.c.unit)
        .join(reading, reading.c.shot_id == shot.c.id)
        .join(observable, observable.c.id == reading.c.observable_id)
        .distinct()
        .order_by(observable.c.name)
    )
    if scan_id is not None:
        query = query.where(shot.c.scan_id == scan_id)
    else:
        sample = select(func.max(shot.c.id)).where(shot.c.scan_id.isnot(None)).group_by(shot.c.scan_id)
        query = query.where(shot.c.id.in_(sample))
    found: dict[int, list[tuple[str, str]]] = {}
    for row in connection.execute(query):
        found.setdefault(row.scan_id, []).append((row.name, row.unit or ""))
    return found


def _main_observables(connection: Connection) -> dict[int, str]:
    cards = {key: parse_card(text, source="card") for key, text in newest_cards(connection).items()}
    return {key: card.main_observable for key, card in cards.items() if card.main_observable is not None}


def _axes(
    connection: Connection, rows: Sequence[Row[Any]], scan_id: int | None
) -> dict[int, tuple[tuple[Axis, ...], dict[str, str], dict[str, str]]]:
    """Return of each scan its axes, the parameters that follow one, and the units of both."""
    axis = tables.scan_axis
    query = select(axis).order_by(axis.c.scan_id, axis.c.position)
    if scan_id is not None:
        query = query.where(axis.c.scan_id == scan_id)
    entries: dict[int, list[Row[Any]]] = {}
    for row in connection.execute(query):
        entries.setdefault(row.scan_id, []).append(row)
    ids = {row.parameter_id for own in entries.values() for row in own}
    named = {item.ids[0]: item for item in named_by_id(connection, tables.parameter, sorted(ids))}
    found = {}
    for scan in rows:
        own = entries.get(scan.id, [])
        leading = [named[row.parameter_id] for row in own if row.follows_id is None]
        followers = {
            named[row.parameter_id].name: named[row.follows_id].name
            for row in own
            if row.follows_id is not None
        }
        units = {named[row.parameter_id].name: named[row.parameter_id].unit for row in own}
        shots, where = select_shots(connection, Selection(scan_id=scan.id, set_aside=True))
        columns = setting_columns(connection, shots, leading, where)
        described = tuple(describe_axis(item.name, item.unit, columns[item.name]) for item in leading)
        found[scan.id] = described, followers, units
    return found


def _read_table(connection: Connection, scan: Scan, set_aside: bool) -> pd.DataFrame:
    import numpy as np
    import pandas as pd

    rows, where = select_shots(connection, Selection(scan_id=scan.id, set_aside=set_aside))
    aside = set(
        connection.execute(
            select(tables.shot.c.id).where(tables.shot.c.scan_id == scan.id, set_aside_now(tables.shot.c.id))
        ).scalars()
    )
    settings = _named_of(
        connection, tables.parameter, [*(a.parameter for a in scan.axes), *scan.followers], scan
    )
    readings = _named_of(connection, tables.observable, scan.observables, scan)
    columns: dict[str, Any] = {
        "uid": [row.uid for row in rows],
        "shot_id": np.array([row.id for row in rows], dtype=np.int64),
        "started": utc_times(np.array([row.started_us for row in rows], dtype=np.int64)),
        "set_aside": np.array([row.id in aside for row in rows], dtype=bool),
    }
    columns |= setting_columns(connection, rows, settings, where)
    for name, (value, stderr) in reading_columns(connection, rows, readings, where).items():
        columns[name] = value
        columns[f"{name}_stderr"] = stderr
    frame = pd.DataFrame(columns)
    frame.attrs["units"] = dict(scan.units)
    return frame


def _named_of(connection: Connection, table: Any, names: Sequence[str], scan: Scan) -> list[Named]:
    query = (
        select(table.c.id, table.c.name)
        .join(tables.machine, tables.machine.c.id == table.c.machine_id)
        .where(tables.machine.c.name == scan.machine, table.c.name.in_(names))
    )
    ids = {name: key for key, name in connection.execute(query).tuples()}
    return named_by_id(connection, table, [ids[name] for name in names])
