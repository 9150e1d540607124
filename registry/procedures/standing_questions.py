"""What is asked of every vehicle on every pass, new runs or not: is it silent, and did it load what was adopted?"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

from registry.domain import judgement
from registry.domain.alert import Alert, AlertContent
from registry.domain.calibration import InForce
from registry.domain.vehicle import VehicleVersion
from registry.procedures import alerting
from registry.services import Services
from registry.storage import alerts as alert_store
from registry.storage import boots as boot_store
from registry.storage import calibrations as calibration_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection


@dataclass(frozen=True)
class Wish:
    """An alert to raise (``content``), or a cause to clear with a note."""

    cause: str
    content: AlertContent | None
    note: str = ""


def wishes(
    c: Connection, services: Services, version: VehicleVersion, in_force: InForce | None, as_of: datetime
) -> list[Wish]:
    """What the alerts on silence and loading should change to; nothing while they say what holds."""
    open_alerts = {one.content.cause(): one for one in alert_store.open_for(c, version.vehicle_id)}
    asked = [_silence(c, services, version, as_of), _loading(c, version, in_force, as_of)]
    return [wish for wish in asked if wish is not None and _changes(wish, open_alerts.get(wish.cause))]


def grant(c: Connection, services: Services, vehicle_id: str, wish: Wish, as_of: datetime) -> None:
    """Raise or clear what a wish says."""
    if wish.content is not None:
        alerting.raise_or_update(c, services, vehicle_id, wish.content, as_of)
    else:
        alerting.clear(c, services, vehicle_id, wish.cause, as_of, wish.note)


def _changes(wish: Wish, known: Alert | None) -> bool:
    holds = known is not None and known.standing != "returned"
    if wish.content is None:
        return holds
    # The sentence on silence counts days; an open alert is not rewritten every day for that.
    return not holds or (known is not None and wish.cause != "no_evidence" and known.content != wish.content)


def _silence(c: Connection, services: Services, version: VehicleVersion, as_of: datetime) -> Wish:
    days = services.settings.silence_days
    last_at = run_store.latest_end(c, version.vehicle_id, as_of)
    since = last_at or vehicle_store.by_version(c, version.vehicle_id, 1).recorded_at
    if as_of - since > timedelta(days=days):
        return Wish("no_evidence", judgement.no_evidence(version.statement.name, last_at, as_of, days))
    return Wish("no_evidence", None, "a usable run came in")


def _loading(c: Connection, version: VehicleVersion, in_force: InForce | None, as_of: datetime) -> Wish | None:
    """Days after an adoption the vehicle's last boot must have loaded what is in force."""
    if in_force is None or in_force.calibration_id is None:
        return Wish("not_loaded", None, "nothing is in force")
    boot = boot_store.latest(c, version.vehicle_id, as_of)
    if boot is None:
        return None
    if boot.calibration_id == in_force.calibration_id:
        return Wish("not_loaded", None, f"number {in_force.number} was loaded")
    if as_of - in_force.in_force_from <= judgement.LOAD_WITHIN:
        return Wish("not_loaded", None, f"number {in_force.number} came into force; there is time to load it")
    number = boot.statement.calibration_number
    if number is None and boot.calibration_id is not None:
        number = calibration_store.by_id(c, boot.calibration_id).number
    return Wish("not_loaded", judgement.not_loaded(version.statement.name, number, in_force))
