"""Maintenance: work on the vehicle that can move its parameters."""

from __future__ import annotations

from flask import Response

from registry.api import bodies, fields
from registry.api.bodies import Answer, Body, Described, PageAnswer, PageQuery, VehiclePath, reply
from registry.api.document import resource
from registry.api.keys import actor, needs, services
from registry.domain.maintenance import Maintenance, MaintenanceKind, Side
from registry.procedures.maintenance import record_maintenance
from registry.storage import maintenance as stored
from registry.storage import vehicles

doors = resource("maintenance")


class MaintenanceBody(Body):
    """Work done."""

    done_at: fields.Time
    kind: MaintenanceKind
    side: Side | None = None
    note: fields.Note = None


class MaintenanceAnswer(Answer):
    """Work on the record; `ends_window` says whether runs before it still count for a calibration after it."""

    maintenance_id: str
    vehicle_id: str
    done_at: fields.Time
    kind: MaintenanceKind
    side: Side | None
    note: str | None
    ends_window: bool
    recorded_at: fields.Time
    recorded_by: str


def described(entry: Maintenance) -> Described:
    """An entry as the doors write it."""
    return {
        **vars(entry),
        "done_at": fields.instant(entry.done_at),
        "recorded_at": fields.instant(entry.recorded_at),
    }


@doors.post("/vehicles/<vehicle_id>/maintenance", responses={201: MaintenanceAnswer})
@needs("technician")
def post_maintenance(path: VehiclePath, body: MaintenanceBody) -> Response:
    """Record work. When it ends the window, boot answers "questioned" until a new calibration is in force."""
    made = record_maintenance(services(), actor(), path.vehicle_id, body.done_at, body.kind, body.side, body.note)
    return reply(described(made), 201)


@doors.get("/vehicles/<vehicle_id>/maintenance", responses={200: PageAnswer[MaintenanceAnswer]})
@needs("reader")
def list_maintenance(path: VehiclePath, query: PageQuery) -> Response:
    """Work on a vehicle, newest first."""
    with services().read() as c:
        vehicles.current(c, path.vehicle_id)
        page = stored.page(c, path.vehicle_id, query.limit, query.after)
    return bodies.reply_page(page, described)
