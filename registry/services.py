"""Chooses what is real: the clock, the identities and the database behind the two kinds of transaction."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from dataclasses import dataclass
from datetime import datetime
from functools import partial

from registry import clock
from registry.settings import Settings
from registry.storage.engine import Bare, Connection, asking, make_engine, reading, writing


@dataclass(frozen=True)
class Services:
    """What every procedure is handed.

    ``read`` and ``write`` answer a transaction to be used in a ``with``; ``write`` commits at its end and rolls back on
    an exception. There is one writer at a time, so what a writer has read still holds when it writes. ``close`` gives
    the kept connections back; the next transaction opens new ones. ``ask`` answers a bare connection for the single
    prepared query of a boot.
    """

    settings: Settings
    now: Callable[[], datetime]
    new_id: Callable[[], str]
    read: Callable[[], AbstractContextManager[Connection]]
    write: Callable[[], AbstractContextManager[Connection]]
    ask: Callable[[], AbstractContextManager[Bare]]
    close: Callable[[], None]


def make_services(settings: Settings, *, durable: bool = True) -> Services:
    """The real services of an installation. Opens no connection: the first transaction does.

    Parameters
    ----------
    durable
        Whether each commit waits for the disk; only a demo may do without.
    """
    engine = make_engine(settings.database_url, durable=durable)
    return Services(
        settings=settings,
        now=clock.now,
        new_id=clock.new_id,
        read=partial(reading, engine),
        write=partial(writing, engine),
        ask=partial(asking, engine),
        close=engine.dispose,
    )
