"""Alerts: what a person must act on."""

from __future__ import annotations

from typing import Annotated, Literal

from flask import Response
from pydantic import Field

from registry.api import bodies, fields
from registry.api.bodies import Answer, Body, Described, PageAnswer, PageQuery, Path, reply
from registry.api.document import CONFLICTS, resource
from registry.api.keys import actor, needs, services
from registry.domain.alert import ActWithin, Alert, AlertContent, AlertEvent, AlertKind, AlertStanding, Priority
from registry.domain.tolerance import Quantity
from registry.procedures import alerting
from registry.storage import alerts as stored

doors = resource("alerts")


class AlertPath(Path):
    """An alert."""

    alert_id: fields.Token


class AlertQuery(PageQuery):
    """Which alerts; open is all but closed."""

    standing: Literal["open", "all"] = "open"
    vehicle_id: Annotated[fields.VehicleId | None, Field(description="Of this vehicle only")] = None


class NoteBody(Body):
    """What was done or seen."""

    note: fields.Note = None


class AlertContentAnswer(Answer):
    """What an alert says."""

    kind: AlertKind
    quantity: Quantity | None
    attribution: str | None
    shape: str | None
    onset_at: fields.Time | None
    size_percent: float | None
    u_percent: float | None
    probability_beyond: float | None
    consequence: str
    message: str
    advice: str
    priority: Priority
    act_within: ActWithin


class AlertEventAnswer(Answer):
    """One entry of an alert's history; `content` is what it said then, where that was new."""

    at: fields.Time
    recorded_at: fields.Time
    by: str
    what: str
    note: str | None
    content: AlertContentAnswer | None


class AlertAnswer(AlertContentAnswer):
    """An alert."""

    alert_id: str
    vehicle_id: str | None
    standing: AlertStanding
    raised_at: fields.Time
    recorded_at: fields.Time
    updated_at: fields.Time
    history: list[AlertEventAnswer]


def described(alert: Alert) -> Described:
    """An alert as the doors write it."""
    return {
        "alert_id": alert.alert_id,
        "vehicle_id": alert.vehicle_id,
        **_content(alert.content),
        "standing": alert.standing,
        "raised_at": fields.instant(alert.raised_at),
        "recorded_at": fields.instant(alert.recorded_at),
        "updated_at": fields.instant(alert.updated_at),
        "history": [_event(event) for event in alert.history],
    }


def _content(content: AlertContent) -> Described:
    return {
        "kind": content.kind,
        "quantity": content.quantity,
        "attribution": content.attribution,
        "shape": content.shape,
        "onset_at": fields.instant(content.onset_at),
        "size_percent": fields.percent(content.size),
        "u_percent": fields.percent(content.u),
        "probability_beyond": content.probability_beyond,
        "consequence": content.consequence,
        "message": content.message,
        "advice": content.advice,
        "priority": content.priority,
        "act_within": content.act_within,
    }


def _event(event: AlertEvent) -> Described:
    return {
        "at": fields.instant(event.at),
        "recorded_at": fields.instant(event.recorded_at),
        "by": event.by,
        "what": event.what,
        "note": event.note,
        "content": None if event.content is None else _content(event.content),
    }


@doors.get("/alerts", responses={200: PageAnswer[AlertAnswer]})
@needs("reader")
def list_alerts(query: AlertQuery) -> Response:
    """Alerts with their history, newest first."""
    with services().read() as c:
        page = stored.page(c, query.standing, query.vehicle_id, query.limit, query.after)
    return bodies.reply_page(page, described)


@doors.post("/alerts/<alert_id>/acknowledgement", responses={200: AlertAnswer, **CONFLICTS})
@needs("technician")
def post_acknowledgement(path: AlertPath, body: NoteBody) -> Response:
    """Acknowledge an alert. It closes when what it says no longer holds, not before."""
    return reply(described(alerting.acknowledge(services(), actor(), path.alert_id, body.note)))
