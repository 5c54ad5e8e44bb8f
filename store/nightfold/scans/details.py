"""What was swept and read in one scan: axes, followers, observables, units, and the table of its shots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Table, select

from nightfold import tables
from nightfold.card import MachineCard
from nightfold.ledger.cards import newest_cards, stored_card
from nightfold.ledger.columns import Named, reading_columns, setting_columns
from nightfold.ledger.deriving import Makings
from nightfold.ledger.selecting import Selection, column_name, named_by_id, select_shots, set_aside_now
from nightfold.scans.axes import Axis, describe_axis
from nightfold.scans.derived import derived_readings, derived_settings
from nightfold.scans.order import orders_of
from nightfold.timestamps import utc_times

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class ScanDetails:
    """What was swept and read in a scan.

    Attributes
    ----------
    axes : tuple of Axis
    order : dict
        Axis -> 'rising', 'falling' or 'mixed', see `order_of`.
    settings : tuple of Named
        The axes, then the parameters that follow one or are made of several.
    followers : dict
        Follower -> the axis it moves along with.
    mixed : dict
        Derived parameter -> the several axes it depends on.
    observables : tuple of Named
        The machine card's main one first, then by name.
    main : str or None
        The main observable, if any was read.
    descriptions : dict
        From the machine card, by name.
    """

    axes: tuple[Axis, ...]
    order: dict[str, str]
    settings: tuple[Named, ...]
    followers: dict[str, str]
    mixed: dict[str, tuple[str, ...]]
    observables: tuple[Named, ...]
    main: str | None
    descriptions: dict[str, str]

    @property
    def units(self) -> dict[str, str]:
        """Unit of every axis, follower and observable."""
        return {item.name: item.unit for item in (*self.settings, *self.observables)}


def read_details(connection: Connection, scan_id: int, machine_id: int) -> ScanDetails:
    """Return the details of a scan."""
    table = tables.scan_axis
    own = list(connection.execute(select(table).where(table.c.scan_id == scan_id).order_by(table.c.position)))
    settings = named_by_id(connection, tables.parameter, [row.parameter_id for row in own])
    names = {item.ids[0]: item.name for item in settings}
    leading = [item for item, row in zip(settings, own, strict=True) if row.follows_id is None]
    rows, where = select_shots(connection, Selection(scan_id=scan_id, set_aside=True))
    columns = setting_columns(connection, rows, leading, where)
    followers = {names[row.parameter_id]: names[row.follows_id] for row in own if row.follows_id is not None}
    card = card_of(connection, machine_id)
    makings = Makings(connection)
    derived = derived_settings(makings, machine_id, [item.name for item in leading], followers)
    read = named_by_id(connection, tables.observable, _observables_read(connection, scan_id))
    read += derived_readings(makings, machine_id, [item.name for item in read])
    main = _main_of(sorted(item.name for item in read), card.main_observable if card else None)
    observables = tuple(sorted(read, key=lambda item: (item.name != main, item.name)))
    found = [*settings, *derived.named, *observables]
    entries = {item.name: card.description(item.name) for item in found} if card is not None else {}
    return ScanDetails(
        axes=tuple(describe_axis(item.name, item.unit, columns[item.name]) for item in leading),
        order=orders_of({item.name: columns[item.name] for item in leading}),
        settings=(*settings, *derived.named),
        followers=followers | derived.followers,
        mixed=derived.mixed,
        observables=observables,
        main=main,
        descriptions={name: text for name, text in entries.items() if text},
    )


def card_of(connection: Connection, machine_id: int) -> MachineCard | None:
    """Return the card in force of a machine, None where it has none."""
    text = newest_cards(connection).get(machine_id)
    return stored_card(text) if text is not None else None


def _observables_read(connection: Connection, scan_id: int) -> list[int]:
    shot, reading = tables.shot, tables.reading
    query = (
        select(reading.c.observable_id)
        .join(shot, shot.c.id == reading.c.shot_id)
        .where(shot.c.scan_id == scan_id)
        .distinct()
    )
    return list(connection.execute(query).scalars())


def _main_of(names: Sequence[str], wanted: str | None) -> str | None:
    """Return the main observable among those read: the card's, its first cloud, else the first by name."""
    if wanted in names:
        return wanted
    clouds = [name for name in names if wanted is not None and name.startswith(f"{wanted}[")]
    return next(iter([*clouds, *names]), None)


def read_shots(connection: Connection, scan_id: int, details: ScanDetails, set_aside: bool) -> pd.DataFrame:
    """Return the shots of a scan, a row each; columns as `Scan.table`."""
    import numpy as np
    import pandas as pd

    rows, where = select_shots(connection, Selection(scan_id=scan_id, set_aside=set_aside))
    shot: Table = tables.shot
    aside = set(
        connection.execute(
            select(shot.c.id).where(shot.c.scan_id == scan_id, set_aside_now(shot.c.id))
        ).scalars()
    )
    columns: dict[str, Any] = {
        "uid": [row.uid for row in rows],
        "shot_id": np.array([row.id for row in rows], dtype=np.int64),
        "started": utc_times(np.array([row.started_us for row in rows], dtype=np.int64)),
        "set_aside": np.array([row.id in aside for row in rows], dtype=bool),
    }
    settings = setting_columns(connection, rows, details.settings, where)
    columns |= {column_name(name): values for name, values in settings.items()}
    for name, (value, stderr) in reading_columns(connection, rows, details.observables, where).items():
        columns[column_name(name)] = value
        columns[f"{column_name(name)}_stderr"] = stderr
    frame = pd.DataFrame(columns)
    frame.attrs["units"] = details.units
    made = [item.name for item in (*details.settings, *details.observables) if item.made_of is not None]
    frame.attrs["derived"] = [column_name(name) for name in made]
    return frame
