"""The nights of each machine: what was taken between one local noon and the next."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from nightfold import tables
from nightfold.ledger.names import newest_cards, stored_card
from nightfold.ledger.selecting import set_aside_now
from nightfold.timestamps import local_times, nights_of

if TYPE_CHECKING:
    import pandas as pd

PAUSE_US = 3600 * 1_000_000
LONGEST_OVERTIME_US = 6 * PAUSE_US
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
        card = stored_card(cards[machine.id]) if machine.id in cards else None
        started = frame["us"].to_numpy(dtype=np.int64)
        nights = (
            nights_of(started, machine.zone, card.night_boundary)
            if card
            else nights_of(started, machine.zone)
        )
        frame["night"] = carry_on(started, nights)
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
