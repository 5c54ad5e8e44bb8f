"""Opening, making and upgrading a store."""

from __future__ import annotations

import os
from pathlib import Path

from nightfold import schema, session
from nightfold.errors import StoreExists, StoreMissing, StoreReadOnly
from nightfold.store import Store, Where


def open_store(where: Where, create: bool = False) -> Store:
    """Open a store.

    Parameters
    ----------
    where : path or str
        A file, or a ``postgresql://`` URL.
    create : bool
        Make the store if there is none; one that is there is opened as it is.

    Raises
    ------
    StoreMissing, StoreReadOnly, NotAStore, StoreOutdated, StoreTooNew
    """
    place = session.find_place(where)
    fresh = create and _is_empty(place)
    if fresh and place.path is not None:
        _check_folder(place.path)
    if not fresh:
        session.check_file(place)
    opened = session.Session(place)
    try:
        if fresh or (create and _unused(opened)):
            schema.create_tables(opened)
        session.check_revision(opened)
        opened.choose_journal()
    except BaseException:
        opened.close()
        raise
    return Store(opened)


def create_store(where: Where) -> Store:
    """Make a new store and open it.

    Raises
    ------
    StoreExists
        If there is one, or anything else, at that place.
    """
    place = session.find_place(where)
    if place.path is not None and not _is_empty(place):
        raise StoreExists(f"store {place}: this file exists already")
    if place.path is None:
        opened = session.Session(place)
        try:
            if not _unused(opened):
                raise StoreExists(f"store {place}: this database holds tables already")
        finally:
            opened.close()
    return open_store(where, create=True)


def upgrade_store(where: Where) -> schema.UpgradeReport:
    """Bring a store to this program's revision; a file is copied beside itself first.

    Raises
    ------
    StoreMissing, NotAStore, StoreReadOnly, StoreError
    """
    return schema.upgrade_tables(session.find_place(where))


def _is_empty(place: session.Place) -> bool:
    path = place.path
    return path is not None and (not path.exists() or (path.is_file() and path.stat().st_size == 0))


def _check_folder(path: Path) -> None:
    if not path.parent.is_dir():
        raise StoreMissing(f"store {path}: there is no folder {path.parent}; make it first")
    if not os.access(path.parent, os.W_OK):
        raise StoreReadOnly(f"store {path}: the folder {path.parent} cannot be written")


def _unused(opened: session.Session) -> bool:
    from sqlalchemy import inspect

    with opened.reading() as connection:
        return not inspect(connection).get_table_names()
