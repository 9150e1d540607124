"""Records work on a vehicle that can have moved its parameters."""

from __future__ import annotations

from datetime import datetime, timedelta

from registry.clock import utc_text
from registry.domain.maintenance import ENDS_WINDOW, MAINTENANCE_WORDS, Maintenance, MaintenanceKind, Side
from registry.domain.person import Actor
from registry.errors import FieldError, Invalid
from registry.procedures.authority import require
from registry.procedures.boot_sheets import refresh_sheet
from registry.services import Services
from registry.storage import journal, maintenance, vehicles

_CLOCK_TOLERANCE = timedelta(minutes=5)


def record_maintenance(
    services: Services,
    actor: Actor,
    vehicle_id: str,
    done_at: datetime,
    kind: MaintenanceKind,
    side: Side | None = None,
    note: str | None = None,
) -> Maintenance:
    """Record work done. Of a kind that ends the window, it makes boot answer "questioned" until a new calibration.

    Raises
    ------
    Invalid
        The work is not of a known kind, or lies ahead.
    NotFound
        No such vehicle.
    """
    require(actor, "technician")
    if kind not in ENDS_WINDOW:
        detail = f"must be one of {', '.join(MAINTENANCE_WORDS)}"
        raise Invalid(f"kind {detail}", (FieldError("/kind", detail),))
    with services.write() as c:
        now = services.now()
        vehicles.current(c, vehicle_id)
        if done_at > now + _CLOCK_TOLERANCE:
            detail = f"lies ahead of the present, {utc_text(now)}: record work when it is done"
            raise Invalid(f"done_at {detail}", (FieldError("/done_at", detail),))
        made = Maintenance(
            maintenance_id=services.new_id(),
            vehicle_id=vehicle_id,
            done_at=min(done_at, now),
            kind=kind,
            side=side,
            note=note,
            ends_window=ENDS_WINDOW[kind],
            recorded_at=now,
            recorded_by=str(actor),
        )
        maintenance.add(c, made)
        what = {
            "maintenance_id": made.maintenance_id,
            "done_at": utc_text(made.done_at),
            "kind": kind,
            "side": side,
            "note": note,
            "ends_window": made.ends_window,
        }
        journal.write(c, now, str(actor), "maintenance", vehicle_id, what)
        refresh_sheet(c, vehicle_id, now)
    return made
