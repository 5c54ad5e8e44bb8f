"""Opening a store: the engine, its transactions, and whether program and store fit each other.

SQLite is the default: one file, write-ahead log with full synchronisation (a committed shot survives a pulled plug), a
rollback journal instead where the file lies on a network share. A PostgreSQL URL serves several writing computers.
Writers take turns: `BEGIN IMMEDIATE` on SQLite, a transaction-long advisory lock on PostgreSQL.
"""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import (
    URL,
    Connection,
    Engine,
    NullPool,
    QueuePool,
    create_engine,
    event,
    make_url,
    select,
    text,
    update,
)
from sqlalchemy.exc import DatabaseError, OperationalError, SQLAlchemyError

from nightfold import tables
from nightfold.errors import (
    NotAStore,
    StoreBusy,
    StoreError,
    StoreMissing,
    StoreOutdated,
    StoreReadOnly,
    StoreTooNew,
)
from nightfold.mounts import network_file_system
from nightfold.tables import REVISION

APPLICATION_ID = 0x6E666C64  # 'nfld', in the header of the file
_HEADER = b"SQLite format 3\0"
_LOCK = 0x6E666C64
_WAIT_S = 30.0


@dataclass(frozen=True, slots=True)
class Place:
    """Where a store is: a file, or a database by URL."""

    path: Path | None
    url: URL

    def __str__(self) -> str:
        return str(self.path) if self.path else self.url.set(drivername="postgresql").render_as_string()


def find_place(where: str | os.PathLike[str] | URL) -> Place:
    """Return the place that a path or a PostgreSQL URL names.

    Raises
    ------
    StoreError
        If the URL names another kind of database.
    """
    written = where if isinstance(where, URL) else os.fspath(where)
    if isinstance(written, str) and "://" not in written:
        path = Path(written)
        return Place(path, URL.create("sqlite+pysqlite", database=str(path)))
    try:
        url = make_url(written)
    except (SQLAlchemyError, ValueError):  # the URL may hold a password, so it is not repeated
        raise StoreError(
            "store: this is no path and no database URL such as postgresql://host/name"
        ) from None
    if url.get_backend_name() != "postgresql":
        raise StoreError(f"store {url.render_as_string()}: wanted a file path or a postgresql:// URL")
    if "+" not in url.drivername:
        url = url.set(drivername="postgresql+psycopg")
    return Place(None, url)


class Session:
    """An open store: reading and writing transactions on one engine.

    Parameters
    ----------
    place : Place
    foreign_keys : bool
        False for an upgrade only: SQLite writes a table anew to change it, and dropping the old one would take what
        refers to it along. The setting cannot be changed within a transaction.
    """

    def __init__(self, place: Place, *, foreign_keys: bool = True) -> None:
        self.place = place
        self.read_only = place.path is not None and not _writable(place.path)
        self.engine = (
            _sqlite_engine(place.path, self.read_only, foreign_keys)
            if place.path
            else _postgresql_engine(place)
        )

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """Give a connection that sees one state of the store."""
        with _explained(self.place), self.engine.connect() as connection:
            if connection.dialect.name == "postgresql":
                connection = connection.execution_options(isolation_level="REPEATABLE READ")
            with connection.begin():
                yield connection

    @contextmanager
    def writing(self, *, empty: bool = False) -> Iterator[Connection]:
        """Give a connection that is the only writer; committed at the end, undone whole if anything is raised.

        Parameters
        ----------
        empty : bool
            There are no tables yet, so no turns are counted.

        Raises
        ------
        StoreReadOnly, StoreBusy
            If the store cannot be written, or another writer holds it for more than half a minute.
        """
        if self.read_only:
            raise StoreReadOnly(f"store {self.place}: the file or its folder cannot be written")
        with _explained(self.place), self.engine.connect() as plain:
            connection = plain.execution_options(nightfold_writes=True)
            with connection.begin():
                if connection.dialect.name == "postgresql":
                    connection.execute(text(f"SELECT pg_advisory_xact_lock({_LOCK})"))
                if not empty:
                    table = tables.turn
                    connection.execute(update(table).values(taken=table.c.taken + 1))
                yield connection

    def choose_journal(self) -> None:
        """Use a write-ahead log, or a rollback journal on a network share; the file keeps to it.

        Only done once the file is known to be a store: that of another program is left as it is.
        """
        path = self.place.path
        if path is None or self.read_only:
            return
        mode = "DELETE" if network_file_system(path.absolute().parent) else "WAL"
        plain = self.engine.raw_connection()
        give_up = time.monotonic() + _WAIT_S
        try:
            while not self._set_journal(plain.cursor(), mode, last=time.monotonic() > give_up):
                time.sleep(0.02)
        finally:
            plain.close()

    def _set_journal(self, cursor: Any, mode: str, *, last: bool) -> bool:
        """Change the journal; False if somebody else is using the file, for SQLite does not wait here by itself."""
        try:
            cursor.execute(f"PRAGMA journal_mode={mode}")
        except sqlite3.OperationalError as problem:
            if last or "locked" not in str(problem):
                raise StoreBusy(f"store {self.place}: somebody else is using it ({problem})") from problem
            return False
        return True

    def close(self) -> None:
        """Give back every connection."""
        self.engine.dispose()


def turn_of(connection: Connection) -> int:
    """Return how many writing transactions the store has seen, this one included.

    A writer whose turn is not one more than its last knows that somebody else wrote in between.
    """
    return int(connection.execute(select(tables.turn.c.taken)).scalar_one())


def revision_of(connection: Connection) -> str | None:
    """Return the schema revision of the store; None if it is no store."""
    if not connection.dialect.has_table(connection, "alembic_version"):
        return None
    if not connection.dialect.has_table(connection, "value_set"):
        return None
    return connection.execute(text("SELECT version_num FROM alembic_version")).scalar()


def check_file(place: Place) -> None:
    """Raise a clear error unless there is a file that can be a store.

    Raises
    ------
    StoreMissing, NotAStore
    """
    path = place.path
    if path is None:
        return
    if not path.parent.is_dir():
        raise StoreMissing(f"store {path}: there is no folder {path.parent}")
    if path.is_dir():
        raise NotAStore(f"store {path}: this is a folder; name the file in it")
    if not path.exists():
        raise StoreMissing(f"store {path}: no such file; make one with 'nightfold --store {path} new'")
    try:
        with path.open("rb") as file:
            head = file.read(100)
    except OSError as problem:
        raise StoreError(f"store {path}: it cannot be read ({problem.strerror})") from problem
    if not head.startswith(_HEADER):
        raise NotAStore(
            f"store {path}: this is no nightfold store (found {head[:16]!r}, wanted an SQLite file)"
        )


def check_revision(session: Session) -> None:
    """Raise a clear error unless store and program have the same schema revision.

    Raises
    ------
    NotAStore, StoreOutdated, StoreTooNew
    """
    with session.reading() as connection:
        found = revision_of(connection)
    if found is None:
        raise NotAStore(f"store {session.place}: a database, but no nightfold store")
    if found < REVISION:
        raise StoreOutdated(
            f"store {session.place}: revision {found}, this nightfold wants {REVISION}; run 'nightfold upgrade'"
        )
    if found > REVISION:
        raise StoreTooNew(
            f"store {session.place}: revision {found} was written by a newer nightfold than this one "
            f"(which knows {REVISION}); install the newer nightfold"
        )


def _writable(path: Path) -> bool:
    if path.exists():
        return os.access(path, os.W_OK) and os.access(path.parent, os.W_OK)
    return os.access(path.parent, os.W_OK)


def _sqlite_engine(path: Path, read_only: bool, foreign_keys: bool) -> Engine:
    full = path.absolute()

    def connect() -> sqlite3.Connection:
        address: str = str(full)
        if read_only:
            still = not Path(f"{full}-wal").exists()
            address = f"{full.as_uri()}?mode=ro{'&immutable=1' if still else ''}"
        return sqlite3.connect(
            address, timeout=_WAIT_S, isolation_level=None, check_same_thread=False, uri=read_only
        )

    engine = create_engine(
        "sqlite+pysqlite://", creator=connect, poolclass=NullPool if read_only else QueuePool
    )

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: Any) -> None:
        cursor = connection.cursor()
        cursor.execute(f"PRAGMA foreign_keys={int(foreign_keys)}")
        if not read_only:
            cursor.execute("PRAGMA synchronous=FULL")
        cursor.execute("PRAGMA cache_size=-65536")
        cursor.close()

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        writes = connection.get_execution_options().get("nightfold_writes", False)
        connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")

    return engine


def _postgresql_engine(place: Place) -> Engine:
    engine = create_engine(place.url)

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: Any) -> None:
        with connection.cursor() as cursor:
            cursor.execute(f"SET lock_timeout = {_WAIT_S * 1000:.0f}")
        connection.commit()

    return engine


@contextmanager
def _explained(place: Place) -> Iterator[None]:
    """Turn the driver's refusals into ours."""
    try:
        yield
    except OperationalError as problem:
        words = str(problem.orig).lower()
        if "is locked" in words or "lock timeout" in words:
            raise StoreBusy(f"store {place}: another writer held it for over {_WAIT_S:.0f} s") from problem
        if "readonly" in words or "read-only" in words:
            raise StoreReadOnly(f"store {place}: it cannot be written") from problem
        if "disk is full" in words or "no space left" in words:
            raise StoreError(
                f"store {place}: the disk is full; nothing of this batch was stored"
            ) from problem
        raise StoreError(f"store {place}: {problem.orig}") from problem
    except DatabaseError as problem:
        if "not a database" in str(problem.orig) or "malformed" in str(problem.orig):
            raise NotAStore(f"store {place}: {problem.orig}") from problem
        raise
