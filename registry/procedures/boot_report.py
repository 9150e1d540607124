"""What a vehicle reports to have loaded, held against what was in force: other parameters raise an alert at once."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime, timedelta

from registry.clock import utc_text
from registry.domain.alert import AlertContent
from registry.domain.boot import Boot, BootStatement
from registry.domain.calibration import Calibration
from registry.domain.consequence import consequence
from registry.domain.person import Actor
from registry.domain.tolerance import Quantity
from registry.domain.vehicle import Parameters
from registry.errors import FieldError, Invalid
from registry.procedures import alerting
from registry.procedures.authority import require_vehicle
from registry.services import Services
from registry.storage import alerts, boots, calibrations, journal, vehicles
from registry.storage.engine import Connection

#: A vehicle that boots within a day of an adoption may still be on the parameters before it.
GRACE = timedelta(days=1)
#: How far a vehicle's clock may differ from ours before what it says is refused or held against it.
CLOCK_TOLERANCE = timedelta(minutes=5)
_CAUSE = "boot_mismatch"


@dataclass(frozen=True)
class _Loaded:
    """What a statement turned out to mean: the calibration it names, if any, and what is wrong with it, if anything."""

    calibration: Calibration | None
    wrong: str | None


def report_boot(services: Services, actor: Actor, vehicle_id: str, statement: BootStatement) -> Boot:
    """Record a boot. One on other parameters than were in force raises ``boot_mismatch``; a matching one clears it.

    What was loaded is judged by number or digest where either is given, whatever the source. ``built_in`` alone names
    nothing that was ever in force here: it is recorded as a mismatch.

    A report that arrives after that of a later boot clears nothing. When it tells of a mismatch, and the later boot was
    right, the alert is raised and at once said to hold no longer, so that it stays to be seen.

    Raises
    ------
    Invalid
        Neither number nor digest is given, or the time lies ahead.
    NotFound
        No such vehicle.
    """
    require_vehicle(actor, vehicle_id, "technician")
    with services.write() as c:
        now = services.now()
        vehicles.current(c, vehicle_id)
        booted_at = _booted_at(statement, now)
        _require_a_name(statement)
        loaded = _resolve(c, vehicle_id, statement, booted_at)
        boot = Boot(
            boot_id=services.new_id(),
            vehicle_id=vehicle_id,
            statement=statement,
            booted_at=booted_at,
            calibration_id=None if loaded.calibration is None else loaded.calibration.calibration_id,
            matched=loaded.wrong is None,
            recorded_at=now,
        )
        boots.add(c, boot)
        _follow_alert(c, services, boot, loaded, now)
        journal.write(c, now, str(actor), "boot", vehicle_id, _told(boot, loaded))
    return boot


def _booted_at(statement: BootStatement, now: datetime) -> datetime:
    if statement.booted_at is None:
        return now
    if statement.booted_at > now + CLOCK_TOLERANCE:
        detail = f"lies ahead of the present, {utc_text(now)}: set the vehicle's clock, or leave it out"
        raise Invalid(f"booted_at {detail}", (FieldError("/booted_at", detail),))
    return min(statement.booted_at, now)


def _require_a_name(statement: BootStatement) -> None:
    """Built-in parameters may have neither number nor digest of ours; all others have at least one."""
    if statement.calibration_number is None and statement.digest is None and statement.source != "built_in":
        detail = "is needed, or digest: say which parameters were loaded"
        raise Invalid(f"calibration_number {detail}", (FieldError("/calibration_number", detail),))


def _resolve(c: Connection, vehicle_id: str, statement: BootStatement, booted_at: datetime) -> _Loaded:
    """Find the calibration that number and digest name, and say what is wrong with it."""
    by_number = by_digest = None
    if statement.calibration_number is not None:
        by_number = calibrations.find_by_number(c, vehicle_id, statement.calibration_number)
    if statement.digest is not None:
        issued = boots.issued_for(c, vehicle_id, statement.digest)
        by_digest = None if issued is None else calibrations.by_id(c, issued)
    calibration = by_digest or by_number
    if statement.digest is not None and by_digest is None:
        return _Loaded(calibration, "parameters of a digest that was never handed out to it")
    if statement.calibration_number is not None and by_number is None:
        return _Loaded(calibration, f"a calibration number {statement.calibration_number} that it never had")
    if by_number is not None and by_digest is not None and by_number.number != by_digest.number:
        contradiction = f"number {by_number.number} but the digest of number {by_digest.number}, a contradiction"
        return _Loaded(calibration, contradiction)
    if calibration is None:
        return _Loaded(None, "the parameters built into it")
    return _Loaded(calibration, _not_in_force(c, calibration, booted_at))


def _not_in_force(c: Connection, calibration: Calibration, booted_at: datetime) -> str | None:
    """What is wrong with a known calibration at a time; None when it was in force, give or take the grace.

    A withdrawn one was sound until the moment it was withdrawn, and has no grace from then on.
    """
    number = calibration.number
    withdrawn_at = calibrations.withdrawn_at(c, calibration.calibration_id)
    if withdrawn_at is not None and booted_at >= withdrawn_at:
        return f"calibration {number}, which is withdrawn"
    history = calibrations.in_force_history(c, calibration.vehicle_id)
    ends = [entry.in_force_from + GRACE for entry in history[1:]] + [datetime.max.replace(tzinfo=booted_at.tzinfo)]
    spans = [
        (entry.in_force_from - CLOCK_TOLERANCE, end)
        for entry, end in zip(history, ends, strict=False)
        if entry.calibration_id == calibration.calibration_id
    ]
    if not spans:
        return f"calibration {number}, which was never put into force"
    if any(begin <= booted_at <= end for begin, end in spans):
        return None
    if booted_at < spans[0][0]:
        return f"calibration {number} before it came into force"
    return f"calibration {number}, which had been superseded more than a day before"


def _follow_alert(c: Connection, services: Services, boot: Boot, loaded: _Loaded, now: datetime) -> None:
    """Let the alert say what the vehicle's last boot was, whatever order the reports arrive in."""
    vehicle_id = boot.vehicle_id
    latest = boots.latest(c, vehicle_id) or boot
    if latest.boot_id == boot.boot_id:
        if loaded.wrong is None:
            alerting.clear(c, services, vehicle_id, _CAUSE, now, "the vehicle booted on what is in force")
        else:
            alerting.raise_or_update(c, services, vehicle_id, _mismatch(c, boot, loaded), now)
    elif loaded.wrong is not None and latest.matched:
        alerting.raise_or_update(c, services, vehicle_id, _past_mismatch(c, boot, loaded, latest), now)
        note = f"a later boot, {_moment(latest.booted_at)}, loaded what is in force"
        alerting.clear(c, services, vehicle_id, _CAUSE, now, note)
    elif not latest.matched:
        _move_onset(c, services, vehicle_id, now)


def _move_onset(c: Connection, services: Services, vehicle_id: str, now: datetime) -> None:
    """A boot before a wrong last one: it may tell that the vehicle was wrong earlier, or right in between."""
    standing = (one for one in alerts.open_for(c, vehicle_id) if one.content.cause() == _CAUSE)
    known = next(standing, None)
    if known is not None:
        content = replace(known.content, onset_at=boots.mismatched_since(c, vehicle_id))
        alerting.raise_or_update(c, services, vehicle_id, content, now)


def _mismatch(c: Connection, boot: Boot, loaded: _Loaded) -> AlertContent:
    entry = calibrations.in_force(c, boot.vehicle_id)
    due = None if entry is None or entry.calibration_id is None else calibrations.by_id(c, entry.calibration_id)
    name = vehicles.current(c, boot.vehicle_id).statement.name
    return AlertContent(
        kind="boot_mismatch",
        quantity=None,
        message=f"{name}: booted on {loaded.wrong} ({_moment(boot.booted_at)})",
        consequence=_consequence(loaded.calibration, due),
        advice="Nothing is in force: put a calibration into force, then let the vehicle load it."
        if due is None
        else f"Let the vehicle load calibration {due.number} and boot again before it drives.",
        priority="high",
        act_within="before it drives",
        onset_at=boots.mismatched_since(c, boot.vehicle_id),
    )


def _past_mismatch(c: Connection, boot: Boot, loaded: _Loaded, latest: Boot) -> AlertContent:
    """A mismatch that a later boot has ended: what was driven in between is all that there is to look at."""
    return replace(
        _mismatch(c, boot, loaded),
        advice=f"It has loaded what is in force since, {_moment(latest.booted_at)}: "
        "look at what it drove before that, and whether it went where it should.",
        priority="medium",
        act_within="this week",
        onset_at=boot.booted_at,
    )


def _moment(at: datetime) -> str:
    return f"{at:%Y-%m-%d %H:%M} UTC"


def _consequence(loaded: Calibration | None, due: Calibration | None) -> str:
    """What driving on the loaded parameters does on the floor, where both they and the right ones are known."""
    if loaded is None or due is None:
        return "How it drives on these is not known here."
    wrong, right = loaded.result.parameters, due.result.parameters
    told = [consequence(quantity, value, right.width_m) for quantity, value in _deviations(wrong, right)]
    return f"On these it {', '.join(told[:-1])} and {told[-1]}."


def _deviations(believed: Parameters, true: Parameters) -> list[tuple[Quantity, float]]:
    return [
        ("tick_factor", true.tick_factor_m_per_tick / believed.tick_factor_m_per_tick - 1.0),
        ("side_ratio", (1.0 + true.side_ratio) / (1.0 + believed.side_ratio) - 1.0),
        ("width", true.width_m / believed.width_m - 1.0),
    ]


def _told(boot: Boot, loaded: _Loaded) -> dict[str, object]:
    statement = boot.statement
    return {
        "boot_id": boot.boot_id,
        "booted_at": utc_text(boot.booted_at),
        "calibration_number": statement.calibration_number,
        "digest": statement.digest,
        "source": statement.source,
        "software": statement.software,
        "matched": boot.matched,
        "wrong": loaded.wrong,
    }
