"""The nights of each machine: what was taken between one local noon and the next."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.ledger.cards import newest_cards, stored_card
from nightfold.ledger.selecting import set_aside_now
from nightfold.timestamps import local_times, nights_of

if TYPE_CHECKING:
    import pandas as pd

PAUSE_US = 3600 * 1_000_000
LONGEST_OVERTIME_US = 6 * PAUSE_US
_BEFORE_US, _AFTER_US = 36 * PAUSE_US, 12 * PAUSE_US  # what can have a say in which night a moment belongs to
COLUMNS = ("night", "machine", "first", "last", "shots", "set_aside", "references", "scans", "sequences")


def night_table(connection: Connection) -> pd.DataFrame:
    """Return a row a night and machine: date of the evening, first and last shot, counts, sequences.

    Work that runs on across the boundary without a pause of an hour belongs to the night it began in. Shots set aside
    count in `shots` too.
    """
    import pandas as pd

    shot, sequence = tables.shot, tables.sequence
    cards = newest_cards(connection)
    rows: list[dict[str, Any]] = []
    for machine in connection.execute(select(tables.machine)).all():
        query = (
            select(
                shot.c.started_us, shot.c.scan_id, shot.c.reference, sequence.c.name,
                set_aside_now(shot.c.id).label("aside"),
            )
            .join(sequence, sequence.c.id == shot.c.sequence_id)
            .where(sequence.c.machine_id == machine.id)
            .order_by(shot.c.started_us)
        )  # fmt: skip
        frame = pd.DataFrame(
            connection.execute(query).all(), columns=["us", "scan", "reference", "sequence", "aside"]
        )
        if frame.empty:
            continue
        started = frame["us"].to_numpy(dtype=np.int64)
        frame["night"] = carry_on(started, _by_the_clock(started, machine.zone, cards.get(machine.id)))
        for night, group in frame.groupby("night", sort=True):
            rows.append(_summary(night, machine.name, machine.zone, group))
    table = pd.DataFrame(rows, columns=list(COLUMNS))
    return table.sort_values(["night", "machine"], ignore_index=True)


def carry_on(started_us: NDArray[np.int64], nights: NDArray[np.object_]) -> NDArray[np.object_]:
    """Return the night of each shot, work across the boundary staying with the night it began in.

    Work that goes on for over six hours past the boundary is cut there: a machine that never pauses has nights too.

    Parameters
    ----------
    started_us : (n,) int array, in order
    nights : (n,) object array of date
    """
    kept = nights.copy()
    if not len(kept):
        return kept
    pauses = np.flatnonzero(np.diff(started_us) >= PAUSE_US) + 1
    for run in np.split(np.arange(len(kept)), pauses):
        crossings = run[1:][nights[run[1:]] != nights[run[:-1]]]
        if len(crossings) == 1 and started_us[run[-1]] - started_us[crossings[0]] <= LONGEST_OVERTIME_US:
            kept[run] = nights[run[0]]
    return kept


def nights_at(connection: Connection, machine: Row[Any], moments_us: Sequence[int]) -> list[date]:
    """Return the night of each moment as `night_table` has it: work that runs on past the boundary stays with its own.

    Parameters
    ----------
    machine : Row
        Of the table of machines.
    moments_us : sequence of int
        In any order.
    """
    if not moments_us:
        return []
    shot, sequence = tables.shot, tables.sequence
    query = (
        select(shot.c.started_us)
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .where(
            sequence.c.machine_id == machine.id,
            shot.c.started_us.between(min(moments_us) - _BEFORE_US, max(moments_us) + _AFTER_US),
        )
    )
    wanted = np.array(moments_us, dtype=np.int64)
    taken = np.array(list(connection.execute(query).scalars()), dtype=np.int64)
    every = np.unique(np.concatenate([taken, wanted]))
    card = newest_cards(connection).get(machine.id)
    nights = carry_on(every, _by_the_clock(every, machine.zone, card))
    return [nights[place] for place in np.searchsorted(every, wanted)]


def _by_the_clock(started_us: NDArray[np.int64], zone: str, card: str | None) -> NDArray[np.object_]:
    """Return the night of each moment by the boundary alone."""
    if card is None:
        return nights_of(started_us, zone)
    return nights_of(started_us, zone, stored_card(card).night_boundary)


def _summary(night: Any, machine: str, zone: str, group: pd.DataFrame) -> dict[str, Any]:
    first, last = local_times(np.array([group["us"].iloc[0], group["us"].iloc[-1]], dtype=np.int64), zone)
    return {
        "night": night,
        "machine": machine,
        "first": first.to_pydatetime(),
        "last": last.to_pydatetime(),
        "shots": len(group),
        "set_aside": int(group["aside"].sum()),
        "references": int(group["reference"].sum()),
        "scans": int(group["scan"].nunique()),
        "sequences": ", ".join(sorted(group["sequence"].unique())),
    }
