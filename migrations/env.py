"""Runs revisions on the connection it is handed, or, for alembic's own command line, on the installation's database."""

from __future__ import annotations

from alembic import context
from sqlalchemy import Connection

from registry.settings import Settings
from registry.storage.engine import make_engine
from registry.storage.tables import metadata


def run(connection: Connection) -> None:
    """Run what alembic was asked for on an open connection, in the caller's transaction."""
    context.configure(
        connection=connection,
        target_metadata=metadata,
        render_as_batch=connection.dialect.name == "sqlite",
        compare_type=True,
    )
    context.run_migrations()


given: Connection | None = context.config.attributes.get("connection")
if given is not None:
    run(given)
else:
    engine = make_engine(Settings.from_environment().database_url)
    with engine.connect() as opened, opened.begin():
        opened.exec_driver_sql("BEGIN IMMEDIATE" if engine.dialect.name == "sqlite" else "SELECT 1")
        run(opened)
