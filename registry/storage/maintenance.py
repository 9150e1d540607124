"""Work done on vehicles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from datetime import datetime
from typing import Any

from sqlalchemy import Row, insert, select

from registry.domain.maintenance import Maintenance
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import maintenance


def add(c: Connection, entry: Maintenance) -> None:
    """Record work done."""
    c.execute(insert(maintenance), asdict(entry))


def page(c: Connection, vehicle_id: str, limit: int, after: str | None) -> Page[Maintenance]:
    """A vehicle's maintenance, the work done last first."""
    statement = select(maintenance).where(maintenance.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [maintenance.c.done_at, maintenance.c.sequence], _entries, limit, after)


def all_for(c: Connection, vehicle_id: str) -> list[Maintenance]:
    """All maintenance of a vehicle, oldest first."""
    statement = select(maintenance).where(maintenance.c.vehicle_id == vehicle_id)
    return _entries(c.execute(statement.order_by(maintenance.c.done_at, maintenance.c.sequence)).all())


def window_ends(
    c: Connection, vehicle_id: str, until: datetime | None = None, known_at: datetime | None = None
) -> list[Maintenance]:
    """A vehicle's work that ended a window, oldest first; done by ``until``, recorded by ``known_at`` if given."""
    statement = select(maintenance).where(maintenance.c.vehicle_id == vehicle_id, maintenance.c.ends_window.is_(True))
    if until is not None:
        statement = statement.where(maintenance.c.done_at <= until)
    if known_at is not None:
        statement = statement.where(maintenance.c.recorded_at <= known_at)
    return _entries(c.execute(statement.order_by(maintenance.c.done_at, maintenance.c.sequence)).all())


def latest_window_end(c: Connection, vehicle_id: str, until: datetime) -> Maintenance | None:
    """The last work done by ``until`` after which runs can no longer be compared with those before."""
    ended = (
        maintenance.c.vehicle_id == vehicle_id,
        maintenance.c.ends_window.is_(True),
        maintenance.c.done_at <= until,
    )
    statement = select(maintenance).where(*ended).order_by(maintenance.c.done_at.desc(), maintenance.c.sequence.desc())
    row = c.execute(statement.limit(1)).first()
    return None if row is None else _entry(row)


def _entries(rows: Sequence[Row[Any]]) -> list[Maintenance]:
    return [_entry(row) for row in rows]


def _entry(row: Row[Any]) -> Maintenance:
    return Maintenance(
        maintenance_id=row.maintenance_id,
        vehicle_id=row.vehicle_id,
        done_at=row.done_at,
        kind=row.kind,
        side=row.side,
        note=row.note,
        ends_window=row.ends_window,
        recorded_at=row.recorded_at,
        recorded_by=row.recorded_by,
    )
