"""Makes the sheet of what a vehicle is to load, now or at any past time, and says how far it may be trusted.

The sheet of each vehicle is kept as finished text beside the record and made anew, in the same transaction, by whatever
moves it. A boot then costs one query and two hashes.
"""

from __future__ import annotations

from datetime import datetime

from registry.clock import whole_second
from registry.domain.alert import Alert, AlertKind
from registry.domain.boot import BootSheet, Condition
from registry.domain.calibration import Calibration, InForce
from registry.domain.maintenance import MAINTENANCE_WORDS, Maintenance
from registry.errors import NothingInForce
from registry.procedures.boot_text import sheet_of
from registry.storage import alerts, boots, calibrations, maintenance, vehicles
from registry.storage.engine import Connection

#: Alerts that say the parameters themselves may be wrong.
QUESTIONING: tuple[AlertKind, ...] = ("beyond_tolerance",)
_STANDS = ("unacknowledged", "acknowledged", "shelved")


def build_sheet(
    c: Connection, vehicle_id: str, at: datetime | None = None, known_at: datetime | None = None
) -> BootSheet:
    """Write what a vehicle is, or was, to load.

    Parameters
    ----------
    at
        The moment asked about; None is now.
    known_at
        Only what had been recorded by then; None is everything.

    Raises
    ------
    NotFound
        No such vehicle.
    NothingInForce
        Nothing was in force then.
    """
    version = vehicles.current(c, vehicle_id) if at is None else vehicles.at(c, vehicle_id, at)
    if known_at is not None and (version.valid_from or known_at) > known_at:
        version = vehicles.at(c, vehicle_id, known_at)
    entry = calibrations.in_force(c, vehicle_id, at, known_at)
    if entry is None or entry.calibration_id is None:
        withdrawn = calibrations.withdrawn_numbers(c, vehicle_id, known_at if at is None else at)
        raise NothingInForce(
            f"vehicle {vehicle_id!r} has no parameters in force: put a calibration into force", withdrawn
        )
    calibration = calibrations.by_id(c, entry.calibration_id)
    origin = calibration if calibration.reinstates is None else calibrations.by_id(c, calibration.reinstates)
    reasons = _questions(c, entry, origin, at, known_at)
    condition: Condition = "questioned" if reasons else "good"
    if origin.result.kind == "provisional":
        condition = "questioned" if reasons else "provisional"
        reasons += (f"calibration {calibration.number} is provisional: drive calibration runs and propose a baseline",)
    return sheet_of(version, entry, calibration, condition, reasons)


def refresh_sheet(c: Connection, vehicle_id: str, now: datetime) -> None:
    """Make a vehicle's sheet anew. Called, in its own transaction, by every procedure that could move it."""
    try:
        sheet = build_sheet(c, vehicle_id)
    except NothingInForce:
        boots.put_sheet(c, vehicle_id, None)
        return
    boots.put_sheet(c, vehicle_id, sheet)
    boots.issue_digest(c, sheet, now)


def awaiting(
    c: Connection, vehicle_id: str, at: datetime | None = None, known_at: datetime | None = None
) -> Maintenance | None:
    """The latest work that ended the window and that no new calibration has answered, if something is in force."""
    entry = calibrations.in_force(c, vehicle_id, at, known_at)
    if entry is None or entry.calibration_id is None:
        return None
    calibration = calibrations.by_id(c, entry.calibration_id)
    origin = calibration if calibration.reinstates is None else calibrations.by_id(c, calibration.reinstates)
    unanswered = _unanswered(c, entry, origin, at, known_at)
    return unanswered[-1] if unanswered else None


def _questions(
    c: Connection, entry: InForce, origin: Calibration, at: datetime | None, known_at: datetime | None
) -> tuple[str, ...]:
    """Why the parameters in force may be wrong, a sentence each."""
    told = [alert.content.message for alert in _questioning_alerts(c, entry.vehicle_id, at, known_at)]
    for work in _unanswered(c, entry, origin, at, known_at):
        side = f" ({work.side})" if work.side else ""
        told.append(f"{MAINTENANCE_WORDS[work.kind]}{side} on {work.done_at:%Y-%m-%d}: awaits a new calibration")
    return tuple(told)


def _questioning_alerts(c: Connection, vehicle_id: str, at: datetime | None, known_at: datetime | None) -> list[Alert]:
    if at is None and known_at is None:
        stood = [alert for alert in alerts.open_for(c, vehicle_id) if alert.content.kind in QUESTIONING]
    else:
        stood = alerts.standing_at(c, vehicle_id, QUESTIONING, at, known_at)
    return [alert for alert in stood if alert.standing in _STANDS]


def _unanswered(
    c: Connection, entry: InForce, origin: Calibration, at: datetime | None, known_at: datetime | None
) -> list[Maintenance]:
    """Window-ending work, oldest first, that the calibration in force knows nothing of.

    A calibration made from runs answers the work done before the first of them, whenever it came into force. One that
    was entered answers what was done before it was both proposed and put into force. A reinstated one is as old as the
    calibration whose numbers it carries.
    """
    works = maintenance.window_ends(c, entry.vehicle_id, at, known_at)
    if not works:
        return []
    first_run_at = calibrations.first_run_at(c, origin.calibration_id)
    if first_run_at is not None:
        return [work for work in works if work.done_at > first_run_at]
    first_entry = entry
    if origin.calibration_id != entry.calibration_id:
        entries = calibrations.in_force_history(c, entry.vehicle_id)
        first_entry = next(one for one in entries if one.calibration_id == origin.calibration_id)
    return [
        work
        for work in works
        if _older(first_entry.in_force_from, first_entry.recorded_at, work)
        or _older(whole_second(origin.recorded_at), origin.recorded_at, work)
    ]


def _older(moment: datetime, recorded_at: datetime, work: Maintenance) -> bool:
    """Whether a moment (in whole seconds) lies before some work; within one second the order of recording decides."""
    done_at = whole_second(work.done_at)
    return moment < done_at or (moment == done_at and recorded_at < work.recorded_at)
