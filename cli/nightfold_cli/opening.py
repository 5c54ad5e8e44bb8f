"""Open the store that a command was pointed at, and say which it is."""

from __future__ import annotations

from argparse import Namespace
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from nightfold_cli.localtimes import LocalTimes, parse_moment
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from datetime import datetime

    from pandas import DataFrame

    from nightfold.store import Store


@contextmanager
def opened(args: Namespace, screen: Screen, *, create: bool = False) -> Iterator[Store]:
    """Open the store of the arguments, with `create` make it if it is not there, and name it."""
    from nightfold.opening import open_store

    with open_store(args.store, create=create) as store:
        screen.store(store.where)
        yield store


def local_times(store: Store) -> LocalTimes:
    """Return the local times of the store's machines."""
    return LocalTimes({machine: store.zone(machine) for machine in store.machines()})


def records(table: DataFrame) -> list[dict[str, Any]]:
    """Return the rows of a table, each by column name."""
    return [{str(name): value for name, value in row.items()} for row in table.to_dict("records")]


def moment(text: str | None, store: Store, machine: str | None = None) -> datetime | None:
    """Return the time an option names, None for none; without an offset it is local to the machine.

    Raises
    ------
    UsageError
        If it is not a time.
    """
    from nightfold_cli.failures import UsageError

    if text is None:
        return None
    try:
        return parse_moment(text, local_times(store).zone(machine))
    except ValueError as error:
        raise UsageError(str(error)) from error
