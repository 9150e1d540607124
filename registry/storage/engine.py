"""The database behind a URL, and the two kinds of transaction: many readers, one writer at a time.

SQLite's driver is kept out of transaction control (``isolation_level=None``): by itself it begins late, so that a
transaction that reads first and writes later fails at once as "locked" whatever the time-out, or loses an update. Here
a writer takes the write lock before it reads anything (``BEGIN IMMEDIATE``). On PostgreSQL a writer takes one advisory
lock first, so that both databases give the same promise.
"""

from __future__ import annotations

import sqlite3
import threading
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path

from sqlalchemy import Connection, Dialect, Engine, PoolProxiedConnection, create_engine, event, make_url
from sqlalchemy.exc import DBAPIError as DatabaseError
from sqlalchemy.exc import OperationalError

from registry.errors import Unready

__all__ = ["Bare", "Connection", "DatabaseError", "Engine", "asking", "make_engine", "reading", "writing"]

#: A writer waits this long for the one before it. Writes last milliseconds; a bulk load may hold the lock for seconds.
BUSY_TIMEOUT_S = 30
_WRITER_LOCK = 0x726F6C6C

_writing_in = threading.local()


def make_engine(url: str, *, durable: bool = True) -> Engine:
    """An engine for SQLite or PostgreSQL. Opens no connection.

    Parameters
    ----------
    durable
        Whether each commit waits until it is on the disk. Without it a SQLite database stays whole when the power
        fails, but may have lost what was committed last: right for a demo, which can be built again.

    Raises
    ------
    ValueError
        For an in-memory SQLite database, which would be another one in every thread.
    """
    if url.startswith("sqlite"):
        if make_url(url).database in (None, "", ":memory:"):
            raise ValueError("an in-memory database is another one in every thread: name a file")
        engine = create_engine(
            url,
            connect_args={"isolation_level": None, "timeout": BUSY_TIMEOUT_S},
            max_overflow=30,
            hide_parameters=True,  # An error's text goes to the log; the hashes of keys and passwords do not.
        )
        synchronous = "FULL" if durable else "NORMAL"
        event.listen(engine, "connect", lambda connection, _record: _prepare_sqlite(connection, synchronous))
        return engine
    return create_engine(url, pool_pre_ping=True, max_overflow=30, hide_parameters=True)


def _prepare_sqlite(connection: sqlite3.Connection, synchronous: str) -> None:
    """Pragmas hold for one connection and must come before its first transaction."""
    for pragma in (
        "journal_mode=WAL", f"synchronous={synchronous}", "foreign_keys=ON", "cache_size=-16000", "temp_store=MEMORY"
    ):  # fmt: skip
        connection.execute(f"PRAGMA {pragma}").close()


@contextmanager
def reading(engine: Engine) -> Iterator[Connection]:
    """A transaction that sees one state of the record throughout.

    Raises
    ------
    Unready
        The database cannot be reached.
    """
    with _connected(engine) as c:
        driver = c.connection.driver_connection
        if isinstance(driver, sqlite3.Connection):
            # Said to the driver itself: the long way costs more than most queries.
            driver.execute("BEGIN")
        else:
            c.exec_driver_sql("SET TRANSACTION ISOLATION LEVEL REPEATABLE READ READ ONLY")
        yield c
        # Closing rolls back, whether or not anything was asked.


@dataclass(frozen=True)
class Bare:
    """A connection of the driver's own, for one prepared question, with the kind of database it leads to."""

    connection: PoolProxiedConnection
    dialect: Dialect


@contextmanager
def asking(engine: Engine) -> Iterator[Bare]:
    """A bare connection for a single query, which sees one state of the record by itself.

    Why this form: at every boot one query is asked, and a third of its time is the query. A transaction with its
    connection object costs 40 µs more.

    Raises
    ------
    Unready
        The database cannot be reached or read.
    """
    try:
        connection = engine.raw_connection()
        try:
            yield Bare(connection, engine.dialect)
        finally:
            connection.close()
    except engine.dialect.loaded_dbapi.Error as error:
        raise Unready(f"the database cannot be read ({error}): run 'rollbook migrate'") from error


@contextmanager
def writing(engine: Engine) -> Iterator[Connection]:
    """The one writing transaction: commits at the end of the ``with``, rolls back on an exception.

    Raises
    ------
    RuntimeError
        When this thread is already writing: it would wait for itself.
    Unready
        When another process has held the write lock for too long, or the database cannot be reached.
    """
    held: set[int] = _writing_in.__dict__.setdefault("engines", set())
    if id(engine) in held:
        raise RuntimeError("a writing transaction was begun inside another one of the same thread")
    held.add(id(engine))
    try:
        with _connected(engine) as c, c.begin():
            _take_write_lock(c)
            yield c
    finally:
        held.discard(id(engine))


def _connected(engine: Engine) -> Connection:
    try:
        return engine.connect()
    except OperationalError as error:
        raise Unready("the database cannot be reached: check ROLLBOOK_DATABASE_URL and the home") from error


def _take_write_lock(c: Connection) -> None:
    if c.dialect.name != "sqlite":
        c.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_WRITER_LOCK})")
        return
    try:
        c.exec_driver_sql("BEGIN IMMEDIATE")
    except OperationalError as error:
        if "locked" in str(error.orig):
            raise Unready(f"another process has been writing for {BUSY_TIMEOUT_S} seconds: try again") from error
        raise


def copy_sqlite(c: Connection, path: Path) -> None:
    """Copy the whole database to a new file, consistent although it may be written to meanwhile."""
    with closing(sqlite3.connect(path)) as target:
        source = c.connection.driver_connection
        if not isinstance(source, sqlite3.Connection):
            raise TypeError("only a SQLite database can be copied so")
        source.backup(target)
