"""Tables and revisions: they agree, and an upgrade keeps every row."""

from __future__ import annotations

import shutil
import sqlite3
import warnings
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import create_engine, inspect, text

from nightfold import schema, session, tables
from nightfold.errors import StoreError
from nightfold.opening import create_store, open_store, upgrade_store
from nightfold.session import Session, find_place


def revisions(folder: Path) -> ScriptDirectory:
    config = Config()
    config.set_main_option("script_location", str(folder))
    return ScriptDirectory.from_config(config)


def test_there_is_one_head_and_the_program_wants_it() -> None:
    assert revisions(schema.migrations_folder()).get_heads() == [tables.REVISION]


def test_revisions_import_nothing_of_the_library() -> None:
    for path in (schema.migrations_folder() / "versions").glob("*.py"):
        assert "nightfold" not in [word for line in path.read_text().splitlines() if "import" in line for word in
                                   line.replace(".", " ").split()], path  # fmt: skip


def test_the_revisions_make_exactly_the_tables(anywhere: str) -> None:
    with open_store(anywhere) as store, store._session.reading() as connection:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # reflecting partial indexes of SQLite warns
            context = MigrationContext.configure(connection, opts={"compare_type": True})
            found = compare_metadata(context, tables.metadata)
        assert found == [], "`alembic check` would find changes"
        assert set(inspect(connection).get_table_names()) == {*tables.metadata.tables, "alembic_version"}


def test_sqlite_has_every_constraint_and_index_of_the_tables(store_path: Path, tmp_path: Path) -> None:
    """Alembic compares neither check constraints nor tables without rowid: SQLite's own text does."""
    plain = tmp_path / "plain.sqlite"
    engine = create_engine(f"sqlite:///{plain}")
    tables.metadata.create_all(engine)
    engine.dispose()
    assert normalised(plain) == normalised(store_path)


def normalised(path: Path) -> dict[str, list[str]]:
    file = sqlite3.connect(path)
    rows = file.execute(
        "SELECT name, sql FROM sqlite_master WHERE sql NOT NULL AND name != 'alembic_version'"
    ).fetchall()
    file.close()
    return {
        name: sorted(part.strip().strip(",") for part in sql.replace('"', "").splitlines())
        for name, sql in rows
    }


def test_the_file_says_whose_it_is(store_path: Path) -> None:
    file = sqlite3.connect(store_path)
    assert file.execute("PRAGMA application_id").fetchone()[0] == session.APPLICATION_ID
    file.close()


def test_a_database_with_other_tables_is_left_alone(postgresql_url: str) -> None:
    place = find_place(postgresql_url)
    engine = create_engine(place.url)
    with engine.begin() as connection:
        connection.execute(text("CREATE TABLE theirs (x int)"))
    with pytest.raises(StoreError, match="no nightfold store"):
        open_store(postgresql_url, create=True)
    with engine.begin() as connection:
        assert inspect(connection).get_table_names() == ["theirs"]
    engine.dispose()


# ---------------------------------------------------------------- a later revision

LATER = '''
"""A later revision: a column that must be filled, which SQLite can only do by writing the table anew."""
import sqlalchemy as sa
from alembic import op
revision, down_revision, branch_labels, depends_on = "0900", "{head}", None, None
def upgrade():
    for name in ("machine", "shot", "parameter", "value_set"):
        recreate = "always" if op.get_bind().dialect.name == "sqlite" else "never"
        with op.batch_alter_table(name, recreate=recreate) as table:
            table.add_column(sa.Column("colour", sa.Text(), nullable=False, server_default="blue"))
{more}
'''


@pytest.fixture
def later(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Let the program have one more revision, and return its file."""
    folder = tmp_path / "migrations"
    shutil.copytree(schema.migrations_folder(), folder)
    path = folder / "versions" / "0900_later.py"
    path.write_text(LATER.format(head=tables.REVISION, more=""))
    monkeypatch.setattr(schema, "migrations_folder", lambda: folder)
    for module in (schema, session):
        monkeypatch.setattr(module, "REVISION", "0900")
    return path


def filled(where: str | Path) -> None:
    with open_store(where) as store:
        store.take(
            {"machine": "heron", "sequence": "s", "started": f"2026-10-05T20:00:{n:02d}Z", "scan": "x",
             "swept": ["a"], "parameters": {"a": n % 5, "b": True}, "observables": {"n": n}, "note": "x"}
            for n in range(30)
        )  # fmt: skip


def rows(where: str | Path) -> dict[str, int]:
    opened = Session(find_place(str(where)))
    with opened.reading() as connection:
        found = {
            name: int(connection.execute(text(f"SELECT count(*) FROM {name}")).scalar_one())
            for name in tables.metadata.tables
        }
    opened.close()
    return found


@pytest.mark.parametrize("engine", ["sqlite", "postgresql"])
def test_an_upgrade_keeps_every_row(engine: str, request: pytest.FixtureRequest, tmp_path: Path) -> None:
    where = str(request.getfixturevalue("store_path" if engine == "sqlite" else "postgresql_url"))
    if engine == "postgresql":
        create_store(where).close()
    filled(where)
    before = rows(where)
    request.getfixturevalue("later")
    report = upgrade_store(where)
    assert (report.before, report.after) == (tables.REVISION, "0900")
    assert rows(where) == before
    assert before["reading"] == 30
    with open_store(where) as store:
        assert store.shots(["a", "b"], ["n"]).n.tolist() == list(range(30))
    if engine == "sqlite":
        assert report.copy == tmp_path / "store.sqlite.before-0900"
        assert rows(report.copy) == before
        problems = sqlite3.connect(where).execute("PRAGMA foreign_key_check").fetchall()
        assert problems == []


def test_an_upgrade_that_fails_changes_nothing(store_path: Path, later: Path) -> None:
    before = rows(store_path)
    later.write_text(LATER.format(head=tables.REVISION, more='    raise ValueError("no")'))
    with pytest.raises(ValueError, match="no"):
        upgrade_store(store_path)
    assert rows(store_path) == before
    file = sqlite3.connect(store_path)
    assert file.execute("SELECT version_num FROM alembic_version").fetchone() == (tables.REVISION,)
    assert "colour" not in [row[1] for row in file.execute("PRAGMA table_info(shot)")]
    file.close()


def test_an_upgrade_that_would_lose_shots_is_undone(store_path: Path, request: pytest.FixtureRequest) -> None:
    filled(store_path)
    before = rows(store_path)
    later: Path = request.getfixturevalue("later")
    later.write_text(
        LATER.format(head=tables.REVISION, more='    op.execute("DELETE FROM shot WHERE id = 1")')
    )
    with pytest.raises(StoreError, match=r"the upgrade would leave rows of .* without their shot"):
        upgrade_store(store_path)
    assert rows(store_path) == before


def test_a_copy_is_never_overwritten(store_path: Path, later: Path) -> None:
    copy = store_path.with_name("store.sqlite.before-0900")
    copy.write_text("precious")
    with pytest.raises(StoreError, match="exists already; move it away first"):
        upgrade_store(store_path)
    assert copy.read_text() == "precious"


def test_an_installation_without_its_revisions(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(schema, "__file__", str(tmp_path / "a" / "b" / "schema.py"))
    with pytest.raises(StoreError, match="this installation of nightfold lacks its migrations"):
        open_store(tmp_path / "a.sqlite", create=True)
