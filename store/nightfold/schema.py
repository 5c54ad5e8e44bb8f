"""Making and upgrading the tables of a store, by the revisions in `migrations/`."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

from sqlalchemy import Connection, insert, inspect

from nightfold.errors import NotAStore, StoreError, StoreReadOnly
from nightfold.session import APPLICATION_ID, Place, Session, check_file, revision_of
from nightfold.tables import REVISION, metadata, turn


@dataclass(frozen=True, slots=True)
class UpgradeReport:
    """What an upgrade did: revisions before and after, and where the copy of the old file lies."""

    before: str
    after: str
    copy: Path | None


def create_tables(session: Session) -> None:
    """Make every table in an empty file or database; those of a store are left as they are.

    Raises
    ------
    NotAStore
        If the database holds other things already.
    """
    with session.writing(empty=True) as connection:
        if revision_of(connection) is not None:
            return  # somebody else made them in this moment
        found = inspect(connection).get_table_names()
        if found:
            raise NotAStore(
                f"store {session.place}: holds other tables already ({', '.join(sorted(found)[:3])})"
            )
        _migrate(connection)
        connection.execute(insert(turn).values(id=1, taken=0))
        if connection.dialect.name == "sqlite":
            connection.exec_driver_sql(f"PRAGMA application_id={APPLICATION_ID}")


def upgrade_tables(place: Place) -> UpgradeReport:
    """Bring a store to the revision of this program; a file is copied beside itself first.

    Raises
    ------
    StoreMissing, NotAStore, StoreReadOnly, StoreError
    """
    check_file(place)
    session = Session(place, foreign_keys=False)
    try:
        with session.reading() as connection:
            before = revision_of(connection)
        if before is None:
            raise NotAStore(f"store {place}: a database, but no nightfold store")
        if before == REVISION:
            return UpgradeReport(before, before, None)
        if before > REVISION:
            raise StoreError(f"store {place}: revision {before} is newer than this nightfold ({REVISION})")
        copy = _copy(session) if place.path else None
        with session.writing(empty=True) as connection:
            _migrate(connection)
            _check_references(connection, place)
        return UpgradeReport(before, REVISION, copy)
    finally:
        session.close()


def _copy(session: Session) -> Path:
    if session.read_only:
        raise StoreReadOnly(f"store {session.place}: cannot be written, so it cannot be upgraded")
    return copy_beside(session, REVISION)


def copy_beside(session: Session, what: str) -> Path:
    """Copy the file of a store beside itself, as ``NAME.before-WHAT``, and return where.

    Within a writing transaction the copy is the file as it was before.

    Raises
    ------
    StoreError
        If there is such a copy already.
    """
    path = session.place.path
    assert path is not None
    copy = path.with_name(f"{path.name}.before-{what}")
    if copy.exists():
        raise StoreError(f"store {session.place}: {copy} exists already; move it away first")
    with closing(sqlite3.connect(path)) as old, closing(sqlite3.connect(copy)) as new:
        old.backup(new)
    return copy


def _check_references(connection: Connection, place: Place) -> None:
    """Raise, and so undo the upgrade, if a row refers to one that is gone (SQLite did not look while upgrading)."""
    if connection.dialect.name != "sqlite":
        return
    lost = connection.exec_driver_sql("PRAGMA foreign_key_check").first()
    if lost is not None:
        raise StoreError(
            f"store {place}: the upgrade would leave rows of {lost[0]} without their {lost[2]}; nothing was changed"
        )


def _migrate(connection: Connection) -> None:
    from alembic import command
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(migrations_folder()).replace("%", "%%"))
    config.attributes["connection"] = connection
    config.attributes["metadata"] = metadata
    command.upgrade(config, "head")


def migrations_folder() -> Path:
    """Return where the revisions lie: inside the installed package, or in the checkout.

    Raises
    ------
    StoreError
        If the installation lacks them.
    """
    here = Path(__file__).resolve().parent
    for folder in (here / "migrations", here.parents[1] / "migrations"):
        if (folder / "env.py").is_file():
            return folder
    raise StoreError(f"this installation of nightfold lacks its migrations (looked in {here / 'migrations'})")
