"""Alembic's entry: runs the revisions on the connection that the program hands over."""

from __future__ import annotations

from alembic import context
from sqlalchemy import Connection, MetaData, create_engine


def run(connection: Connection, metadata: MetaData | None) -> None:
    """Run the revisions asked for inside the caller's transaction."""
    context.configure(
        connection=connection,
        target_metadata=metadata,
        render_as_batch=True,
        compare_type=True,
        transactional_ddl=True,
    )
    with context.begin_transaction():
        context.run_migrations()


given = context.config.attributes.get("connection")
tables = context.config.attributes.get("metadata")
if given is not None:
    run(given, tables)
else:  # `alembic` by hand: -x store=FILE names an SQLite file
    place = context.get_x_argument(as_dictionary=True).get("store", "nightfold.sqlite")
    with create_engine(f"sqlite+pysqlite:///{place}").begin() as own:
        run(own, tables)
