"""Brings a database to the newest schema and says whether it is there, from a checkout or an installed wheel alike."""

from __future__ import annotations

from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, Engine

import migrations


def alembic_config() -> Config:
    """Where the revisions are, for alembic."""
    config = Config()
    config.set_main_option("script_location", str(Path(migrations.__file__).parent).replace("%", "%%"))
    return config


def head_revision() -> str:
    """The newest revision that this program knows."""
    head = ScriptDirectory.from_config(alembic_config()).get_current_head()
    if head is None:
        raise RuntimeError("the migrations folder holds no revision")
    return head


def current_revision(c: Connection) -> str | None:
    """The revision of a database, or None when it is empty."""
    return MigrationContext.configure(c).get_current_revision()


def migrate(engine: Engine) -> list[str]:
    """Bring the database to the newest revision, all or nothing.

    On SQLite foreign keys are off meanwhile (rebuilding a table would delete its child rows) and checked before the
    commit; the transaction is begun by hand, since otherwise half a migration would stay.

    Returns
    -------
    list of str
        Rows whose foreign keys point nowhere; when there are any, nothing was changed.
    """
    config = alembic_config()
    sqlite = engine.dialect.name == "sqlite"
    with engine.connect() as c:
        if sqlite:
            c.exec_driver_sql("PRAGMA foreign_keys=OFF")
            c.rollback()
        try:
            with c.begin() as transaction:
                c.exec_driver_sql("BEGIN IMMEDIATE" if sqlite else "SELECT pg_advisory_xact_lock(1919904876)")
                config.attributes["connection"] = c
                command.upgrade(config, "head")
                broken = broken_references(c)
                if broken:
                    transaction.rollback()
                return broken
        finally:
            if sqlite:
                c.exec_driver_sql("PRAGMA foreign_keys=ON")
                c.rollback()


def broken_references(c: Connection) -> list[str]:
    """Rows whose foreign keys point nowhere. PostgreSQL never lets one in, so there the answer is empty."""
    if c.dialect.name != "sqlite":
        return []
    rows = c.exec_driver_sql("PRAGMA foreign_key_check").all()
    return [f"row {row[1]} of {row[0]} points to a row of {row[2]} that is not there" for row in rows]


def damaged_pages(c: Connection) -> list[str]:
    """What the database itself finds wrong with its file; PostgreSQL looks after its own."""
    if c.dialect.name != "sqlite":
        return []
    return [
        f"the database file is damaged: {said}"
        for said in c.exec_driver_sql("PRAGMA quick_check").scalars()
        if said != "ok"
    ]
