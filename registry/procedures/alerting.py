"""Alerts follow the evidence: one open alert a cause, updated while it holds, closed when it no longer does.

The times of an alert are the pass's (``at``); when it was written is kept apart. A late look at the past never
overrides what a later look has already said about the same cause, whatever people have done with the alert since.
"""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime

from registry.domain.alert import Alert, AlertContent, AlertStanding
from registry.domain.person import Actor
from registry.errors import Conflict
from registry.procedures import authority
from registry.services import Services
from registry.storage import alerts as alert_store
from registry.storage import journal
from registry.storage.engine import Connection


def raise_or_update(
    c: Connection, services: Services, vehicle_id: str, content: AlertContent, at: datetime
) -> Alert | None:
    """Open an alert for a cause, or let the open one say what holds now; one that had returned is raised again.

    Returns
    -------
    Alert or None
        The open alert of the cause; None when a later look has found that it does not hold.
    """
    known = _open_with_cause(c, vehicle_id, content.cause())
    if _is_late(c, vehicle_id, content.cause(), at):
        return known
    recorded_at = services.now()
    if known is None:
        raised = alert_store.raise_alert(c, services.new_id(), vehicle_id, content, at, recorded_at)
        what = {"alert_id": raised.alert_id, "cause": content.cause(), "message": content.message}
        journal.write(c, recorded_at, "schedule", "alert raised", vehicle_id, what)
        return raised
    if known.standing == "returned":
        alert_store.update(c, known.alert_id, content, at, recorded_at)
        alert_store.set_standing(
            c, known.alert_id, "unacknowledged", at, recorded_at, alert_store.PROGRAM, "raised again", None
        )
        what = {"alert_id": known.alert_id, "cause": content.cause(), "message": content.message}
        journal.write(c, recorded_at, "schedule", "alert raised again", vehicle_id, what)
        return replace(known, content=content, standing="unacknowledged", updated_at=at)
    if known.content == content:
        return known
    alert_store.update(c, known.alert_id, content, at, recorded_at)
    return replace(known, content=content, updated_at=at)


def clear(c: Connection, services: Services, vehicle_id: str, cause: str, at: datetime, note: str) -> Alert | None:
    """The cause no longer holds: an acknowledged alert is closed, one nobody has seen stays as returned until seen."""
    known = _open_with_cause(c, vehicle_id, cause)
    if known is None or known.standing == "returned" or _is_late(c, vehicle_id, cause, at):
        return known
    recorded_at = services.now()
    seen = known.standing in ("acknowledged", "shelved")
    standing: AlertStanding = "closed" if seen else "returned"
    said = "closed by evidence" if seen else "no longer holds"
    alert_store.set_standing(c, known.alert_id, standing, at, recorded_at, alert_store.PROGRAM, said, note)
    what = {"alert_id": known.alert_id, "note": note}
    journal.write(c, recorded_at, "schedule", f"alert {standing}", vehicle_id, what)
    return replace(known, standing=standing, updated_at=at)


def clear_deviations(c: Connection, services: Services, vehicle_id: str, at: datetime, note: str) -> None:
    """What was said of deviations from a calibration no longer holds."""
    for one in alert_store.open_for(c, vehicle_id):
        if one.content.kind == "beyond_tolerance":
            clear(c, services, vehicle_id, one.content.cause(), at, note)


def clear_for_another(c: Connection, services: Services, vehicle_id: str, at: datetime, note: str) -> None:
    """Another calibration, or none, is in force: deviations from the one before, and its loading, no longer matter."""
    clear_deviations(c, services, vehicle_id, at, note)
    clear(c, services, vehicle_id, "not_loaded", at, note)


def acknowledge(services: Services, actor: Actor, alert_id: str, note: str | None) -> Alert:
    """A person has seen the alert. It stays open while it holds; one that had returned is closed by being seen.

    Raises
    ------
    Conflict
        The alert is closed or was acknowledged before.
    """
    authority.require(actor, "technician")
    now = services.now()
    with services.write() as c:
        known = alert_store.by_id(c, alert_id)
        if known.standing in ("acknowledged", "closed"):
            raise Conflict(f"the alert is already {known.standing}")
        standing: AlertStanding = "closed" if known.standing == "returned" else "acknowledged"
        at = max(now, known.updated_at)
        alert_store.set_standing(c, alert_id, standing, at, now, str(actor), "acknowledged", note)
        what = {"alert_id": alert_id, "note": note, "standing": standing}
        journal.write(c, now, str(actor), "alert acknowledged", known.vehicle_id, what)
        return alert_store.by_id(c, alert_id)


def _open_with_cause(c: Connection, vehicle_id: str, cause: str) -> Alert | None:
    return next((one for one in alert_store.open_for(c, vehicle_id) if one.content.cause() == cause), None)


def _is_late(c: Connection, vehicle_id: str, cause: str, at: datetime) -> bool:
    """Whether evidence of a later time has spoken on the cause already."""
    last = alert_store.last_evidence_at(c, vehicle_id, cause)
    return last is not None and at < last
