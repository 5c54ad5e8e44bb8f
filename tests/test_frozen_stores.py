"""Stores of every published revision are upgraded with every value intact (tests/reference/stores)."""

from __future__ import annotations

import shutil
import sqlite3
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest
from alembic import command
from alembic.config import Config
from sqlalchemy import MetaData, create_engine, text

from nightfold import schema, tables
from nightfold.errors import StoreOutdated
from nightfold.opening import open_store, upgrade_store
from nightfold.session import find_place

FROZEN = sorted((Path(__file__).parent / "reference" / "stores").glob("revision-*.sqlite"))
Content = dict[str, tuple[list[str], list[tuple[Any, ...]]]]


@pytest.fixture(params=FROZEN, ids=lambda path: path.stem)
def frozen(request: pytest.FixtureRequest, tmp_path: Path) -> Path:
    """A copy of a frozen store."""
    copy = tmp_path / "old.sqlite"
    shutil.copyfile(request.param, copy)
    return copy


def content_of(path: Path) -> Content:
    """Return every value of every table, by table: column names and sorted rows."""
    with closing(sqlite3.connect(path)) as file:
        names = [row[0] for row in file.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
        found: Content = {}
        for name in names:
            cursor = file.execute(f'SELECT * FROM "{name}"')
            columns = [column[0] for column in cursor.description]
            found[name] = columns, sorted(cursor.fetchall(), key=repr)
        return found


def test_there_is_one_for_every_revision_but_the_newest() -> None:
    revisions = sorted(
        path.name.split("_")[0] for path in (schema.migrations_folder() / "versions").glob("*.py")
    )
    assert [path.stem.removeprefix("revision-") for path in FROZEN] == revisions[:-1]


def test_a_frozen_store_fills_every_table_of_its_revision(frozen: Path) -> None:
    empty = [name for name, (_, rows) in content_of(frozen).items() if not rows]
    assert empty == []


def test_an_old_store_is_refused_until_it_is_upgraded(frozen: Path) -> None:
    with pytest.raises(StoreOutdated, match="upgrade"):
        open_store(frozen)


def test_every_value_survives(frozen: Path) -> None:
    before = content_of(frozen)
    report = upgrade_store(frozen)
    assert report.after == tables.REVISION
    after = content_of(frozen)
    for name, (columns, rows) in before.items():
        if name in ("alembic_version", "turn"):
            continue
        places = [after[name][0].index(column) for column in columns]
        kept = sorted((tuple(row[place] for place in places) for row in after[name][1]), key=repr)
        assert kept == rows, name
    assert report.copy is not None
    assert content_of(report.copy) == before


def test_what_people_see_is_what_was_taken(frozen: Path) -> None:
    """Scans, shots and fits mean the same in the new program as in the one that wrote them."""
    upgrade_store(frozen)
    with open_store(frozen) as store:
        assert [(scan.key, scan.shots, scan.set_aside) for scan in store.scans()] == [
            ("coarse#1", 24, 2), ("2", 16, 0), ("coarse#2", 1, 0), ("3", 5, 0),
        ]  # fmt: skip
        assert [fit.stale for fit in store.fits()] == [False, False, False]
        seen = store.shot("e007")
        assert seen.parameters["big"].value == 9007199254740993
        assert seen.parameters["load.duration"].value == 4.2
        assert seen.observables["atom_number[up]"].value == 77778.0
        assert seen.observables["atom_number[up]"].derivation == "reanalysis"
        assert store.shot("e003").set_aside == "the shutter stayed shut"
        assert store.shot("e004").notes == ("looked odd: größer",)
        assert store.take([{"format": 1, "uid": "e011", "observables": {"temperature": 1.5}}]).amended == 1


def test_every_value_survives_on_postgresql(frozen: Path, postgresql_url: str) -> None:
    before = content_of(frozen)
    revision = before["alembic_version"][1][0][0]
    place = find_place(postgresql_url)
    engine = create_engine(place.url)
    config = Config()
    config.set_main_option("script_location", str(schema.migrations_folder()).replace("%", "%%"))
    config.attributes["metadata"] = tables.metadata
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, revision)
        old = MetaData()
        old.reflect(connection)
        for table in old.sorted_tables:
            if table.name != "alembic_version":
                columns, rows = before[table.name]
                typed = [
                    {c: _typed(table.c[c], v) for c, v in zip(columns, row, strict=True)} for row in rows
                ]
                typed.sort(key=lambda row: row.get("id", 0))  # a fit may refer to an earlier one
                connection.execute(table.insert(), typed)
    upgrade_store(postgresql_url)
    with engine.connect() as connection:
        for name, (columns, rows) in before.items():
            if name in ("alembic_version", "turn"):
                continue
            listed = ", ".join(f'"{column}"' for column in columns)
            found = connection.execute(text(f'SELECT {listed} FROM "{name}"')).all()
            plain = [tuple(bytes(v) if isinstance(v, memoryview) else int(v) if isinstance(v, bool) else v
                           for v in row) for row in found]  # fmt: skip
            assert sorted(plain, key=repr) == rows, name
    engine.dispose()


def _typed(column: Any, value: Any) -> Any:
    return bool(value) if value is not None and column.type.python_type is bool else value
