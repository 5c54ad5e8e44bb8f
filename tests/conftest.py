from __future__ import annotations

import os
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from uuid import uuid4

import pytest
from hypothesis import HealthCheck, settings

from nightfold.opening import create_store, open_store
from nightfold.store import Store

settings.register_profile(
    "nightfold",
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
settings.load_profile("nightfold")

SERVER = "127.0.0.1:5432"
DATABASE = "test"
NewStore = Callable[[], Store]


@pytest.fixture(scope="session")
def empty_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the file of an empty store, to be copied."""
    path = tmp_path_factory.mktemp("empty") / "empty.sqlite"
    create_store(path).close()
    return path


@pytest.fixture
def store_path(tmp_path: Path, empty_store: Path) -> Path:
    """Return the file of a fresh, empty store."""
    path = tmp_path / "store.sqlite"
    shutil.copy(empty_store, path)
    return path


@pytest.fixture
def store(store_path: Path) -> Iterator[Store]:
    """Return a fresh, empty SQLite store."""
    with open_store(store_path) as opened:
        yield opened


@pytest.fixture(scope="session")
def postgresql_user() -> str:
    """Return who may use the local PostgreSQL server; skip where none answers."""
    psycopg = pytest.importorskip("psycopg")
    for user in dict.fromkeys([os.environ.get("PGUSER", "root"), "root", "postgres"]):
        try:
            psycopg.connect(f"postgresql://{user}@{SERVER}/{DATABASE}", connect_timeout=3).close()
        except psycopg.OperationalError:
            continue
        return user
    pytest.skip(f"no PostgreSQL server answers at {SERVER} with a database {DATABASE!r}")


@pytest.fixture
def new_schema(postgresql_user: str) -> Iterator[Callable[[], str]]:
    """Return a function that makes an empty PostgreSQL schema and returns the URL that leads to it."""
    import psycopg

    made: list[str] = []

    def make() -> str:
        name = f"nightfold_{uuid4().hex[:12]}"
        connection.execute(f"CREATE SCHEMA {name}")
        made.append(name)
        return f"postgresql://{postgresql_user}@{SERVER}/{DATABASE}?options=-csearch_path%3D{name}"

    with psycopg.connect(
        f"postgresql://{postgresql_user}@{SERVER}/{DATABASE}", autocommit=True
    ) as connection:
        yield make
        for name in made:
            connection.execute(f"DROP SCHEMA {name} CASCADE")


@pytest.fixture
def postgresql_url(new_schema: Callable[[], str]) -> str:
    """Return the URL of an empty PostgreSQL schema."""
    return new_schema()


@pytest.fixture(params=["sqlite", "postgresql"])
def anywhere(request: pytest.FixtureRequest) -> str:
    """Return where a fresh, empty store is: a file, then a PostgreSQL URL."""
    if request.param == "sqlite":
        return str(request.getfixturevalue("store_path"))
    url = str(request.getfixturevalue("postgresql_url"))
    create_store(url).close()
    return url
