"""A scan as it is kept in the store, with its axes: swept parameters, and those that move along with one."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from typing import Any

from sqlalchemy import Connection, delete, func, insert, select

from nightfold import tables
from nightfold.ledger.columns import setting_columns
from nightfold.ledger.names import insert_row
from nightfold.ledger.selecting import Selection, named_by_id, select_shots
from nightfold.scans.axes import choose_axes
from nightfold.scans.likely import likely_axes


def new_scan(connection: Connection, row: dict[str, Any]) -> int:
    """Enter a scan and return its id, which no scan has had that was arranged by hand, nor one that was undone."""
    scan, arranged = tables.scan.c, tables.arranged.c
    highest = (
        connection.execute(select(func.max(column))).scalar() or 0
        for column in (scan.id, arranged.from_scan, arranged.to_scan)
    )
    return insert_row(connection, tables.scan, {"id": max(highest) + 1, **row})


def set_axes(
    connection: Connection, scan_id: int, axes: Sequence[int], followers: Mapping[int, int] | None = None
) -> None:
    """Enter the axes of a scan, in order, and the parameters that follow one (follower id -> axis id)."""
    table = tables.scan_axis
    connection.execute(delete(table).where(table.c.scan_id == scan_id))
    leaders = {**dict.fromkeys(axes), **(followers or {})}
    rows = [
        {"scan_id": scan_id, "parameter_id": parameter_id, "position": position, "follows_id": leader}
        for position, (parameter_id, leader) in enumerate(leaders.items())
    ]
    if rows:
        connection.execute(insert(table), rows)


def leading_axes(connection: Connection, scan_id: int) -> list[int]:
    """Return the parameters that are the axes of a scan, in order, without those that follow one."""
    table = tables.scan_axis
    own = select(table.c.parameter_id).where(table.c.scan_id == scan_id, table.c.follows_id.is_(None))
    return list(connection.execute(own.order_by(table.c.position)).scalars())


def settle_axes(
    connection: Connection, scan_id: int, swept: Collection[int], *, declared: bool = True
) -> None:
    """Find out from a scan's shots what its axes are and what moves along with them, and enter it.

    Parameters
    ----------
    swept : collection of int
        Parameters declared or found to be swept; empty where nothing is known, then whatever moves may be an axis.
    declared : bool
        Whether the records say so; otherwise `likely_axes` has a say.
    """
    moving = moving_parameters(connection, scan_id)
    old = (
        select(tables.scan_axis)
        .where(tables.scan_axis.c.scan_id == scan_id)
        .order_by(tables.scan_axis.c.position)
    )
    known = [row.parameter_id for row in connection.execute(old)]
    kept = [parameter_id for parameter_id in known if parameter_id in swept]
    wanted = [*kept, *sorted(set(swept) - set(kept))]
    others = [parameter_id for parameter_id in moving if parameter_id not in swept]
    if len(wanted) == 1 and not others:
        if known != wanted:
            set_axes(connection, scan_id, wanted)
        return
    rows, where = select_shots(connection, Selection(scan_id=scan_id, set_aside=True))
    named = named_by_id(connection, tables.parameter, [*wanted, *others])
    ids = {item.name: item.ids[0] for item in named}
    columns = setting_columns(connection, rows, named, where)
    chosen = [item.name for item in named if item.ids[0] in swept]
    if columns and not (declared and chosen):
        chosen = likely_axes({name: columns[name] for name in chosen or columns})
    axes, followers = choose_axes(columns, chosen)
    set_axes(
        connection,
        scan_id,
        [ids[name] for name in axes],
        {ids[name]: ids[leader] for name, leader in followers.items()},
    )


def moving_parameters(connection: Connection, scan_id: int) -> list[int]:
    """Return the parameters that take more than one value within a scan, the most varied first."""
    shot, move, rest = tables.shot, tables.shot_value, tables.set_value
    own = shot.c.scan_id == scan_id
    values: dict[int, set[tuple[float | None, str | None]]] = {}
    moved = select(move.c.parameter_id, move.c.num, move.c.exact).join(shot, shot.c.id == move.c.shot_id)
    sets = list(connection.execute(select(shot.c.set_id).where(own).distinct()).scalars())
    rested = select(rest.c.parameter_id, rest.c.num, rest.c.exact).where(rest.c.set_id.in_(sets))
    for query in (moved.where(own).distinct(), rested.distinct()):
        for row in connection.execute(query):
            values.setdefault(row.parameter_id, set()).add((row.num, row.exact))
    ranked = sorted((-len(found), parameter_id) for parameter_id, found in values.items() if len(found) > 1)
    return [parameter_id for _, parameter_id in ranked]
