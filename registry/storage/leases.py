"""Leases: of several processes one works. The fence grows with every change of holder, so a late one is recognised.

A lease also remembers when the work under it was last done, so that whoever holds it next knows when it is due.
"""

from __future__ import annotations

from datetime import datetime, timedelta

from sqlalchemy import insert, select

from registry.storage.engine import Connection
from registry.storage.tables import leases


def acquire(c: Connection, name: str, holder: str, now: datetime, ttl_s: float) -> int | None:
    """Take or renew a lease.

    Parameters
    ----------
    ttl_s
        Seconds until it lapses unless renewed.

    Returns
    -------
    int or None
        The fencing number, the same for as long as the holder keeps the lease; None when another one holds it.
    """
    row = c.execute(select(leases).where(leases.c.name == name)).first()
    expires_at = now + timedelta(seconds=ttl_s)
    if row is None:
        c.execute(insert(leases).values(name=name, holder=holder, fence=1, expires_at=expires_at))
        return 1
    lapsed = row.expires_at <= now
    if row.holder != holder and not lapsed:
        return None
    # A holder that let it lapse starts anew: someone else may have looked in between.
    fence: int = row.fence if row.holder == holder and not lapsed else row.fence + 1
    c.execute(leases.update().where(leases.c.name == name).values(holder=holder, fence=fence, expires_at=expires_at))
    return fence


def is_free(c: Connection, name: str, holder: str, now: datetime) -> bool:
    """Whether the lease could be taken or renewed: cheap to ask, settled only by `acquire`."""
    row = c.execute(select(leases).where(leases.c.name == name)).first()
    return row is None or row.holder == holder or row.expires_at <= now


def holds(c: Connection, name: str, holder: str, fence: int, now: datetime) -> bool:
    """Whether the lease is still this holder's under this fencing number."""
    row = c.execute(select(leases).where(leases.c.name == name)).first()
    return row is not None and row.holder == holder and row.fence == fence and row.expires_at > now


def release(c: Connection, name: str, holder: str, now: datetime) -> None:
    """Give the lease back, if it is still held, so that another process need not wait for it to lapse."""
    held = (leases.c.name == name, leases.c.holder == holder, leases.c.expires_at > now)
    c.execute(leases.update().where(*held).values(expires_at=now))


def done_at(c: Connection, name: str) -> datetime | None:
    """When the work under a lease was last done, by whichever holder; None when never."""
    at: datetime | None = c.scalar(select(leases.c.done_at).where(leases.c.name == name))
    return at


def note_done(c: Connection, name: str, holder: str, fence: int, now: datetime) -> None:
    """Remember that the work under a lease has been done; a holder that lost it meanwhile changes nothing."""
    held = (leases.c.name == name, leases.c.holder == holder, leases.c.fence == fence)
    c.execute(leases.update().where(*held).values(done_at=now))
