"""Alerts and their history. The database itself refuses a second open alert of one vehicle for one cause."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, fields, replace
from datetime import datetime
from typing import Any, Literal

from sqlalchemy import Row, Select, func, insert, select

from registry.domain.alert import Alert, AlertContent, AlertEvent, AlertKind, AlertStanding
from registry.errors import NotFound
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import alert_events, alerts

_CONTENT = tuple(field.name for field in fields(AlertContent))
#: Who raises and updates unless told otherwise: evidence does, not a person.
PROGRAM = "rollbook"
_OPEN = alerts.c.standing != "closed"
_ALERTS: Select[Any] = select(alerts)


def raise_alert(
    c: Connection,
    alert_id: str,
    vehicle_id: str | None,
    content: AlertContent,
    raised_at: datetime,
    recorded_at: datetime,
    *,
    by: str = PROGRAM,
) -> Alert:
    """Record a new alert, unacknowledged."""
    c.execute(
        insert(alerts).values(
            alert_id=alert_id,
            vehicle_id=vehicle_id,
            cause=content.cause(),
            standing="unacknowledged",
            raised_at=raised_at,
            recorded_at=recorded_at,
            updated_at=raised_at,
            **asdict(content),
        )
    )
    _add_event(c, alert_id, AlertEvent(raised_at, recorded_at, by, "raised", None, content), "unacknowledged")
    return by_id(c, alert_id)


def update(
    c: Connection, alert_id: str, content: AlertContent, at: datetime, recorded_at: datetime, *, by: str = PROGRAM
) -> None:
    """Let an open alert follow the evidence; the history keeps what it said before."""
    standing = _standing(c, alert_id)
    c.execute(alerts.update().where(alerts.c.alert_id == alert_id).values(updated_at=at, **asdict(content)))
    _add_event(c, alert_id, AlertEvent(at, recorded_at, by, "updated", None, content), standing)


def set_standing(
    c: Connection,
    alert_id: str,
    standing: AlertStanding,
    at: datetime,
    recorded_at: datetime,
    by: str,
    what: str,
    note: str | None,
) -> None:
    """Record how an alert stands from now on; ``what`` is the word for it in the history."""
    _standing(c, alert_id)
    c.execute(alerts.update().where(alerts.c.alert_id == alert_id).values(standing=standing, updated_at=at))
    _add_event(c, alert_id, AlertEvent(at, recorded_at, by, what, note, None), standing)


def by_id(c: Connection, alert_id: str) -> Alert:
    """One alert with its history.

    Raises
    ------
    NotFound
        No such alert.
    """
    row = c.execute(_ALERTS.where(alerts.c.alert_id == alert_id)).first()
    if row is None:
        raise NotFound(f"there is no alert {alert_id!r}")
    return _with_history(c, [row])[0]


def open_for(c: Connection, vehicle_id: str) -> list[Alert]:
    """A vehicle's open alerts, oldest first, without their history."""
    statement = _ALERTS.where(alerts.c.vehicle_id == vehicle_id, _OPEN).order_by(alerts.c.raised_at, alerts.c.sequence)
    return [_alert(row) for row in c.execute(statement)]


def all_open(c: Connection) -> list[Alert]:
    """All open alerts, newest first, without their history."""
    statement = _ALERTS.where(_OPEN).order_by(alerts.c.raised_at.desc(), alerts.c.sequence.desc())
    return [_alert(row) for row in c.execute(statement)]


def last_evidence_at(c: Connection, vehicle_id: str, cause: str) -> datetime | None:
    """When evidence last spoke on a cause, on any alert of it, closed ones too. What people did does not count."""
    latest = select(func.max(alert_events.c.at, type_=alert_events.c.at.type)).join(
        alerts, alerts.c.alert_id == alert_events.c.alert_id
    )
    of_cause = (alerts.c.vehicle_id == vehicle_id, alerts.c.cause == cause, alert_events.c.by == PROGRAM)
    at: datetime | None = c.scalar(latest.where(*of_cause))
    return at


def page(
    c: Connection, standing: Literal["open", "all"], vehicle_id: str | None, limit: int, after: str | None
) -> Page[Alert]:
    """Alerts with their history, the one raised last first."""
    statement = _ALERTS
    if standing == "open":
        statement = statement.where(_OPEN)
    if vehicle_id is not None:
        statement = statement.where(alerts.c.vehicle_id == vehicle_id)
    keys = [alerts.c.raised_at, alerts.c.sequence]
    return page_of(c, statement, keys, lambda rows: _with_history(c, rows), limit, after)


def standing_at(
    c: Connection, vehicle_id: str, kinds: Sequence[AlertKind], at: datetime | None, known_at: datetime | None
) -> list[Alert]:
    """A vehicle's alerts of some kinds as they stood at a time, as far as had been recorded by another.

    Alerts that had been closed by then are left out; the others carry the content and standing of then, no history.
    """
    statement = (
        select(alert_events, alerts.c.vehicle_id, alerts.c.raised_at)
        .join(alerts, alerts.c.alert_id == alert_events.c.alert_id)
        .where(alerts.c.vehicle_id == vehicle_id, alerts.c.kind.in_(kinds))
    )
    if at is not None:
        statement = statement.where(alert_events.c.at <= at)
    if known_at is not None:
        statement = statement.where(alert_events.c.recorded_at <= known_at)
    statement = statement.order_by(alert_events.c.at, alert_events.c.sequence)
    stood: dict[str, Alert] = {}
    for row in c.execute(statement):
        before = stood.get(row.alert_id)
        content = _event(row).content or (None if before is None else before.content)
        if content is not None:
            stood[row.alert_id] = Alert(
                row.alert_id, vehicle_id, content, row.standing, row.raised_at, row.recorded_at, row.at
            )
    return [alert for alert in stood.values() if alert.standing != "closed"]


def _standing(c: Connection, alert_id: str) -> AlertStanding:
    standing: AlertStanding | None = c.scalar(select(alerts.c.standing).where(alerts.c.alert_id == alert_id))
    if standing is None:
        raise NotFound(f"there is no alert {alert_id!r}")
    return standing


def _add_event(c: Connection, alert_id: str, event: AlertEvent, standing: AlertStanding) -> None:
    content = {} if event.content is None else asdict(event.content)
    c.execute(
        insert(alert_events).values(
            alert_id=alert_id,
            at=event.at,
            recorded_at=event.recorded_at,
            by=event.by,
            what=event.what,
            note=event.note,
            standing=standing,
            **content,
        )
    )


def _with_history(c: Connection, rows: Sequence[Row[Any]]) -> list[Alert]:
    ids = [row.alert_id for row in rows]
    told: dict[str, list[AlertEvent]] = {alert_id: [] for alert_id in ids}
    if ids:
        events = select(alert_events).where(alert_events.c.alert_id.in_(ids)).order_by(alert_events.c.sequence)
        for row in c.execute(events):
            told[row.alert_id].append(_event(row))
    return [replace(_alert(row), history=tuple(told[row.alert_id])) for row in rows]


def _content(row: Row[Any]) -> AlertContent:
    columns = row._mapping
    return AlertContent(**{name: columns[name] for name in _CONTENT})


def _event(row: Row[Any]) -> AlertEvent:
    content = None if row.kind is None else _content(row)
    return AlertEvent(row.at, row.recorded_at, row.by, row.what, row.note, content)


def _alert(row: Row[Any]) -> Alert:
    return Alert(
        alert_id=row.alert_id,
        vehicle_id=row.vehicle_id,
        content=_content(row),
        standing=row.standing,
        raised_at=row.raised_at,
        recorded_at=row.recorded_at,
        updated_at=row.updated_at,
    )
