"""Puts a calibration into force, and takes one back. Only a person does either; nothing is ever edited."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime

from registry.clock import utc_text, whole_second
from registry.domain.calibration import Calibration, InForce
from registry.domain.person import Actor
from registry.errors import Conflict, FieldError, Invalid, NotAllowed
from registry.procedures import alerting
from registry.procedures.authority import require_adopter
from registry.procedures.boot_sheets import refresh_sheet
from registry.services import Services
from registry.storage import boots, calibrations, journal
from registry.storage.engine import Connection

_DONE = {"in force": "is in force already", "superseded": "was superseded", "withdrawn": "is withdrawn"}


@dataclass(frozen=True)
class Withdrawal:
    """What holds after a withdrawal, and which vehicles have reported loading what was withdrawn."""

    calibration: Calibration
    in_force: Calibration | None
    loaded_by: tuple[str, ...]


def adopt(
    services: Services,
    actor: Actor,
    calibration_id: str,
    reason: str,
    in_force_from: datetime | None = None,
    number: int | None = None,
) -> Calibration:
    """Put a proposed calibration into force; the one before it is superseded.

    Parameters
    ----------
    in_force_from
        From when it holds, rounded down to a whole second; now when None. Earlier than now is marked entered late.
    number
        Confirms the calibration's own number, when given.

    Raises
    ------
    NotAllowed
        The actor may not put into force, or proposed it where two persons are asked for.
    Conflict
        It is not a proposal any more, another came into force since it was proposed, or it has another number.
    Invalid
        The reason is missing; the time lies ahead, or before that of the one in force.
    """
    with services.write() as c:
        require_adopter(c, actor)
        _require_reason(reason)
        calibration = calibrations.by_id(c, calibration_id)
        before = calibrations.in_force(c, calibration.vehicle_id)
        _require_adoptable(services, actor, calibration, before, number)
        now = services.now()
        present = whole_second(now)
        since = present if in_force_from is None else whole_second(in_force_from)
        _require_time(since, present, before)
        if before is not None and before.calibration_id is not None:
            superseded_by = f"superseded by calibration {calibration.number}"
            calibrations.add_standing(c, before.calibration_id, "superseded", now, str(actor), superseded_by)
        _put(c, calibration, since, now, str(actor), reason, late=since < present)
        what = {
            "calibration_id": calibration_id,
            "number": calibration.number,
            "in_force_from": utc_text(since),
            "entered_late": since < present,
            "reason": reason,
        }
        journal.write(c, now, str(actor), "adopted", calibration.vehicle_id, what)
        # What was said against the calibration before no longer speaks of what the vehicle is to load.
        alerting.clear_for_another(c, services, calibration.vehicle_id, now, "another calibration came into force")
        refresh_sheet(c, calibration.vehicle_id, now)
        return calibrations.by_id(c, calibration_id)


def withdraw(
    services: Services, actor: Actor, calibration_id: str, reason: str, then: str, number: int | None = None
) -> Withdrawal:
    """Take a calibration back and say what holds next.

    Parameters
    ----------
    then
        ``reinstate``: the values of calibration ``number`` come into force at once, as a new calibration of kind
        ``reinstated``. ``nothing``: the vehicle has nothing to load. Withdrawing one that is not in force leaves what
        is in force as it is, whichever is said with ``nothing``.

    Raises
    ------
    NotAllowed
        The actor may not withdraw.
    Conflict
        It is withdrawn already, or the one to reinstate was never in force or is withdrawn itself.
    Invalid
        The reason or the number is missing, or ``then`` is neither of the two.
    """
    with services.write() as c:
        require_adopter(c, actor)
        _require_reason(reason)
        _require_then(then, number)
        calibration = calibrations.by_id(c, calibration_id)
        if calibration.standing == "withdrawn":
            raise Conflict(f"calibration {calibration.number} is withdrawn already")
        now = services.now()
        origin = None if then == "nothing" or number is None else _reinstatable(c, calibration, number)
        calibrations.add_standing(c, calibration_id, "withdrawn", now, str(actor), reason)
        was_in_force = calibration.standing == "in force"
        if origin is not None:
            _reinstate(c, services, actor, origin, calibration, reason)
        elif was_in_force:
            vehicle_id, since = calibration.vehicle_id, _not_before_last(c, calibration.vehicle_id, whole_second(now))
            calibrations.put_in_force(c, vehicle_id, None, since, now, str(actor), reason, entered_late=False)
        entry = calibrations.in_force(c, calibration.vehicle_id)
        holds = None if entry is None or entry.calibration_id is None else calibrations.by_id(c, entry.calibration_id)
        loaded_by = boots.loaded_by(c, calibration_id)
        what = {
            "calibration_id": calibration_id,
            "number": calibration.number,
            "then": then,
            "reinstated_number": number,
            "in_force_number": None if holds is None else holds.number,
            "loaded_by": list(loaded_by),
            "reason": reason,
        }
        journal.write(c, now, str(actor), "withdrawn", calibration.vehicle_id, what)
        if was_in_force:
            alerting.clear_for_another(c, services, calibration.vehicle_id, now, "the calibration was withdrawn")
        refresh_sheet(c, calibration.vehicle_id, now)
        return Withdrawal(calibrations.by_id(c, calibration_id), holds, loaded_by)


def _require_reason(reason: str) -> None:
    if not reason.strip():
        detail = "is needed: say why, for those who read the record later"
        raise Invalid(f"reason {detail}", (FieldError("/reason", detail),))


def _require_then(then: str, number: int | None) -> None:
    if then not in ("reinstate", "nothing"):
        detail = "must be 'reinstate' or 'nothing': say what holds next"
        raise Invalid(f"then {detail}", (FieldError("/then", detail),))
    if then == "reinstate" and number is None:
        detail = "is needed to reinstate: the number of a calibration that was once in force"
        raise Invalid(f"number {detail}", (FieldError("/number", detail),))
    if then == "nothing" and number is not None:
        detail = "says which calibration to reinstate; leave it out when nothing is to hold"
        raise Invalid(f"number {detail}", (FieldError("/number", detail),))


def _require_adoptable(
    services: Services, actor: Actor, calibration: Calibration, before: InForce | None, number: int | None
) -> None:
    if calibration.standing != "proposed":
        stands = _DONE[calibration.standing]
        raise Conflict(f"calibration {calibration.number} {stands}: only a proposed one can be adopted")
    if number is not None and number != calibration.number:
        detail = f"is {number}, but this is calibration {calibration.number}: check which one is meant"
        raise Conflict(f"number {detail}", (FieldError("/number", detail),))
    holds = None if before is None else before.calibration_id
    if holds != calibration.based_on:
        present = "nothing" if before is None or before.number is None else f"calibration {before.number}"
        raise Conflict(
            f"{present} is in force now, which is not what held when calibration {calibration.number} was proposed: "
            "propose it again, so that it is judged against what holds"
        )
    if services.settings.two_person and calibration.recorded_by == str(actor):
        raise NotAllowed(f"{actor} proposed calibration {calibration.number}: another person puts it into force")


def _require_time(since: datetime, present: datetime, before: InForce | None) -> None:
    if since > present:
        detail = f"lies ahead of the present, {utc_text(present)}: parameters come into force now or did earlier"
        raise Invalid(f"in_force_from {detail}", (FieldError("/in_force_from", detail),))
    if before is not None and since < before.in_force_from:
        detail = f"lies before {utc_text(before.in_force_from)}, when what is in force now began"
        raise Invalid(f"in_force_from {detail}", (FieldError("/in_force_from", detail),))


def _put(
    c: Connection, calibration: Calibration, since: datetime, now: datetime, by: str, reason: str, *, late: bool
) -> None:
    calibrations.put_in_force(
        c, calibration.vehicle_id, calibration.calibration_id, since, now, by, reason, entered_late=late
    )
    calibrations.add_standing(c, calibration.calibration_id, "in force", now, by, reason)


def _not_before_last(c: Connection, vehicle_id: str, moment: datetime) -> datetime:
    """The moment, or when the last entry began if a clock was set back since: the history stays in order."""
    last = calibrations.in_force(c, vehicle_id)
    return moment if last is None else max(moment, last.in_force_from)


def _reinstatable(c: Connection, withdrawn: Calibration, number: int) -> Calibration:
    """The calibration whose values may hold again in place of the withdrawn one."""
    if withdrawn.standing != "in force":
        raise Conflict(f"calibration {withdrawn.number} is not in force: say 'nothing', and what is in force stays")
    chosen = calibrations.find_by_number(c, withdrawn.vehicle_id, number)
    if chosen is None or chosen.in_force_from is None:
        raise Conflict(f"calibration {number} was never in force on {withdrawn.vehicle_id!r}: name one that was")
    if chosen.standing == "withdrawn" or chosen.number == withdrawn.number:
        raise Conflict(f"calibration {number} is withdrawn: name one that is not")
    if chosen.reinstates is None:
        return chosen
    origin = calibrations.by_id(c, chosen.reinstates)
    if origin.standing == "withdrawn":
        raise Conflict(f"calibration {number} carries the values of {origin.number}, which is withdrawn: name another")
    return origin


def _reinstate(
    c: Connection, services: Services, actor: Actor, origin: Calibration, withdrawn: Calibration, reason: str
) -> None:
    now = services.now()
    note = f"Values of calibration {origin.number} again, in place of {withdrawn.number}."
    made = calibrations.add(
        c,
        services.new_id(),
        withdrawn.vehicle_id,
        replace(origin.result, kind="reinstated", note=note),
        withdrawn.calibration_id,
        now,
        str(actor),
        reinstates=origin.calibration_id,
    )
    since = _not_before_last(c, withdrawn.vehicle_id, whole_second(now))
    _put(c, made, since, now, str(actor), reason, late=False)
