"""Open the store that a command was pointed at, and say which it is."""

from __future__ import annotations

from argparse import Namespace
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

from nightfold_cli.localtimes import LocalTimes, parse_moment
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from datetime import datetime

    from nightfold.store import Store


@contextmanager
def opened(args: Namespace, screen: Screen, *, create: bool = False) -> Iterator[Store]:
    """Open the store of the arguments and name it on the screen."""
    from nightfold.store import open_store

    with open_store(args.store, create=create) as store:
        screen.store(store.where)
        yield store


def local_times(store: Store) -> LocalTimes:
    """Return the local times of the store's machines."""
    return LocalTimes.of(store.cards())


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
