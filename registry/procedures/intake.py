"""Take a logged run onto the record, once for every door: check it, fold it, say what it is good for."""

from __future__ import annotations

import hashlib
import json
import math
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from typing import Any

import numpy as np

from registry.domain.person import Actor
from registry.domain.run import ClosureStatement, Conditions, Misclosure, Run, RunState, Use
from registry.domain.vehicle import Parameters, VehicleVersion
from registry.errors import Conflict, FieldError, Invalid, TooLarge
from registry.numerics import closure_map, counters
from registry.numerics.arrays import Float, Int
from registry.numerics.closure import HEADING
from registry.numerics.closure_map import CountsStack
from registry.numerics.fit import misclosures
from registry.procedures import authority
from registry.procedures.evidence import closures_of, misclosure_of, parameter_array
from registry.services import Services
from registry.storage import calibrations as calibration_store
from registry.storage import counts_blob, journal
from registry.storage import in_force as in_force_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

MAX_SAMPLES = 2_000_000
MAX_KEY_LENGTH = 200
#: A clock that runs a little ahead of ours is no reason to lose a run.
AHEAD = timedelta(minutes=5)
#: Below this the vehicle has not moved: a few millimetres of play in the drive are not a run.
_NO_MOTION_M = 0.02
#: Another reading of impossible counts explains them when it closes to this share of the way rolled.
_EXPLAINS_SHARE, _EXPLAINS_M, _EXPLAINS_RAD = 0.1, 0.1, 0.35


@dataclass(frozen=True)
class RunStatement:
    """A run as it comes through a door, in SI.

    ``time_s`` (n,), ``left_counts`` and ``right_counts`` (n,) are as logged; ``content_digest`` identifies the whole
    body.
    """

    run_key: str
    started_at: datetime
    time_s: Float
    left_counts: Int
    right_counts: Int
    closure: ClosureStatement
    conditions: Conditions
    content_digest: str


@dataclass(frozen=True)
class _Worked:
    """What the counts say, computed before anything is written."""

    use: Use
    reasons: tuple[str, ...]
    rolled_m: float
    turned_rad: float
    misclosure: Misclosure | None
    map_blob: bytes


def content_digest(body: dict[str, Any]) -> str:
    """Identity of a body as parsed: the same fields and values, in any order and spacing, give the same digest."""
    canonical = json.dumps(body, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
    return hashlib.sha256(canonical.encode("utf-8", "surrogatepass")).hexdigest()


def take_run(services: Services, actor: Actor, vehicle_id: str, statement: RunStatement) -> tuple[Run, bool]:
    """Record a run; answer it and whether it is new.

    Raises
    ------
    Invalid
        Something in the body is wrong; every error names its field and sample.
    Conflict
        The run key is known with other content.
    """
    authority.require_vehicle(actor, vehicle_id, "technician")
    now = services.now()
    _check(statement, now)
    with services.read() as c:
        version = vehicle_store.at(c, vehicle_id, statement.started_at)
        known = _known(c, vehicle_id, statement)
        if known is not None:
            return known, False
        in_force = _parameters_at(c, vehicle_id, statement.started_at)
        centre = _parameters_at(c, vehicle_id, now) or in_force or version.statement.nominal
    _check_range(statement, version.statement.counter_bits)
    worked = _work(statement, version, in_force, centre)
    blob = counts_blob.encode(statement.time_s, statement.left_counts, statement.right_counts)
    duration_s = float(statement.time_s[-1] - statement.time_s[0])
    with services.write() as c:
        known = _known(c, vehicle_id, statement)
        if known is not None:
            return known, False
        ended_at = statement.started_at + timedelta(seconds=duration_s)
        overlapping = run_store.overlapping(c, vehicle_id, statement.started_at, ended_at)
        shared = tuple(f"overlaps in time with run {other.run_key}" for other in overlapping)
        run = Run(
            run_id=services.new_id(),
            vehicle_id=vehicle_id,
            run_key=statement.run_key,
            vehicle_version=version.version,
            started_at=statement.started_at,
            ended_at=ended_at,
            duration_s=duration_s,
            samples=int(statement.time_s.size),
            distance_m=worked.rolled_m,
            turned_rad=worked.turned_rad,
            closure=statement.closure,
            conditions=statement.conditions,
            misclosure=worked.misclosure,
            content_digest=statement.content_digest,
            counts_digest=counts_blob.counts_digest(blob),
            use=worked.use,
            reasons=worked.reasons + shared,
            recorded_at=now,
            recorded_by=str(actor),
        )
        run_store.add(c, run, blob, worked.map_blob)
        what = {"run_id": run.run_id, "run_key": run.run_key, "use": run.use, "counts_digest": run.counts_digest}
        journal.write(c, now, str(actor), "run recorded", vehicle_id, what)
    return run, True


def check_run(services: Services, actor: Actor, vehicle_id: str, statement: RunStatement) -> None:
    """Refuse what `take_run` would refuse, recording nothing: a whole manifest is checked before a run is taken."""
    authority.require_vehicle(actor, vehicle_id, "technician")
    _check(statement, services.now())
    with services.read() as c:
        version = vehicle_store.at(c, vehicle_id, statement.started_at)
        _known(c, vehicle_id, statement)
    _check_range(statement, version.statement.counter_bits)


def set_aside(services: Services, actor: Actor, run_id: str, reason: str) -> Run:
    """Take a run out of use, with a reason. A technician may set aside runs they recorded; others need an approver."""
    return _restate(services, actor, run_id, "set aside", reason)


def restore(services: Services, actor: Actor, run_id: str, reason: str) -> Run:
    """Put a run back into use, with a reason."""
    return _restate(services, actor, run_id, "usable", reason)


def _restate(services: Services, actor: Actor, run_id: str, use: Use, reason: str) -> Run:
    if not reason.strip():
        raise Invalid("a reason is needed", (FieldError("/reason", "say why, in a few words"),))
    now = services.now()
    with services.write() as c:
        authority.require(actor, "technician")
        run = run_store.by_id(c, run_id)
        if use == "usable" or run.recorded_by != str(actor):
            authority.require(actor, "approver")
        if run.use == use:
            raise Conflict(f"run {run.run_key} is already {use}")
        reasons = (f"set aside by {actor}: {reason.strip()}",) if use == "set aside" else ()
        run_store.add_state(c, run_id, RunState(use, reasons, now, str(actor)))
        action = "run set aside" if use == "set aside" else "run restored"
        what = {"run_id": run_id, "run_key": run.run_key, "reason": reason.strip()}
        journal.write(c, now, str(actor), action, run.vehicle_id, what)
    return replace(run, use=use, reasons=reasons)


def _known(c: Connection, vehicle_id: str, statement: RunStatement) -> Run | None:
    known = run_store.find_by_key(c, vehicle_id, statement.run_key)
    if known is not None and known.content_digest != statement.content_digest:
        raise Conflict(
            f"run_key {statement.run_key!r} is known with other content: "
            "give a new run its own key; a recorded run is not edited"
        )
    return known


def _parameters_at(c: Connection, vehicle_id: str, time: datetime) -> Parameters | None:
    held = in_force_store.in_force(c, vehicle_id, time)
    if held is None or held.calibration_id is None:
        return None
    return calibration_store.by_id(c, held.calibration_id).result.parameters


def _check(statement: RunStatement, now: datetime) -> None:
    """Everything that can be judged without knowing the vehicle."""
    errors: list[FieldError] = []
    key = statement.run_key
    if not 1 <= len(key) <= MAX_KEY_LENGTH or any(not letter.isprintable() for letter in key):
        errors.append(FieldError("/run_key", f"must be 1 to {MAX_KEY_LENGTH} characters without control characters"))
    if statement.started_at > now + AHEAD:
        errors.append(FieldError("/started_at", "is more than 5 minutes in the future: check the clock that wrote it"))
    size = statement.time_s.size
    if size > MAX_SAMPLES:
        raise TooLarge(f"a run has at most {MAX_SAMPLES} samples, this one has {size}: cut the log")
    for name, readings in (("left_counts", statement.left_counts), ("right_counts", statement.right_counts)):
        if readings.size != size:
            errors.append(
                FieldError(f"/{name}", f"has {readings.size} samples and time_s has {size}: all three must match")
            )
    if size < 2:
        errors.append(FieldError("/time_s", "a run needs at least 2 samples"))
    elif not bool(np.all(np.isfinite(statement.time_s))):
        first = int(np.argmin(np.isfinite(statement.time_s)))
        errors.append(FieldError(f"/time_s/{first}", "must be a finite number"))
    elif not bool(np.all(np.diff(statement.time_s) > 0.0)):
        first = int(np.argmin(np.diff(statement.time_s) > 0.0)) + 1
        errors.append(FieldError(f"/time_s/{first}", "must be later than the sample before: sort or cut the log"))
    errors.extend(_closure_errors(statement.closure))
    if errors:
        raise Invalid("the run cannot be taken as it is", tuple(errors))


def _closure_errors(closure: ClosureStatement) -> list[FieldError]:
    errors: list[FieldError] = []
    place = (closure.x_m, closure.y_m, closure.distance_m)
    if all(value is None for value in (*place, closure.heading_rad)):
        errors.append(FieldError("/closure", "measure at least one of x_mm, y_mm, heading_deg, distance_mm"))
    for pointer, sd, needed in (
        ("/closure/position_sd_mm", closure.position_sd_m, any(value is not None for value in place)),
        ("/closure/heading_sd_deg", closure.heading_sd_rad, closure.heading_rad is not None),
    ):
        if (sd is None and needed) or (sd is not None and not sd > 0.0):
            errors.append(FieldError(pointer, "give the standard uncertainty of the reading, above 0"))
    if closure.heading_rad is not None and not -math.pi < closure.heading_rad <= math.pi + 1e-12:
        errors.append(
            FieldError("/closure/heading_deg", "must be above -180 and at most 180; give whole turns in turns")
        )
    if closure.distance_m is not None and closure.distance_m < 0.0:
        errors.append(
            FieldError("/closure/distance_mm", "must not be negative: it is the straight distance from start to end")
        )
    return errors


def _check_range(statement: RunStatement, bits: int) -> None:
    """Readings must be in the counter's range: a reading outside was not made by this counter."""
    errors = []
    for name, readings in (("left_counts", statement.left_counts), ("right_counts", statement.right_counts)):
        outside = (readings < 0) | (readings >= 1 << bits)
        if outside.any():
            sample = int(np.argmax(outside))
            detail = (
                f"{int(readings[sample])} is not a reading of a {bits}-bit counter (0 to {(1 << bits) - 1}): "
                "log readings, not increments, or correct counter_bits of the vehicle"
            )
            errors.append(FieldError(f"/{name}/{sample}", detail))
    if errors:
        raise Invalid("a counter reading is out of range", tuple(errors))


def _work(statement: RunStatement, version: VehicleVersion, in_force: Parameters | None, centre: Parameters) -> _Worked:
    stated = version.statement
    left = counters.increments(statement.left_counts, stated.counter_bits)
    right = counters.increments(statement.right_counts, stated.counter_bits)
    array = parameter_array(centre)
    rolled_m = 0.5 * float(array[0] * np.abs(left).sum() + array[1] * np.abs(right).sum())
    reasons: list[str] = []
    factors = (float(array[0]), float(array[1]))
    step = counters.first_impossible_step(left, right, statement.time_s, factors, stated.max_speed_m_per_s)
    if step is not None:
        reasons.append(
            f"impossible speed at sample {step.sample}: {step.side} {step.speed_m_per_s:.1f} m/s, "
            f"at most {stated.max_speed_m_per_s:g} m/s; {_explanation(statement, version, array)}"
        )
    elif rolled_m < _NO_MOTION_M:
        reasons.append(f"no motion: the sides rolled {rolled_m * 1000.0:.0f} mm")
    misclosure = None
    if in_force is not None:
        lever = [(stated.reference_point.ahead_m, stated.reference_point.left_m)]
        stack = CountsStack([(left, right)], np.array(lever))
        row = misclosures(stack, closures_of([statement.closure]), parameter_array(in_force))[0]
        misclosure = misclosure_of(row, statement.closure)
    return _Worked(
        use="set aside" if reasons else "usable",
        reasons=tuple(reasons),
        rolled_m=rolled_m,
        turned_rad=float(array[1] * right.sum() - array[0] * left.sum()) / float(array[2]),
        misclosure=misclosure,
        map_blob=closure_map.encode(closure_map.fold(left, right, array)),
    )


def _explanation(statement: RunStatement, version: VehicleVersion, parameters: Float) -> str:
    """Which usual mistake makes the counts possible and the run close; or that none does."""
    stated = version.statement
    closures = closures_of([statement.closure])
    lever = np.array([(stated.reference_point.ahead_m, stated.reference_point.left_m)])
    factors = (float(parameters[0]), float(parameters[1]))
    for reading in counters.other_readings(statement.left_counts, statement.right_counts, stated.counter_bits):
        left, right = reading.left_ticks, reading.right_ticks
        if counters.first_impossible_step(left, right, statement.time_s, factors, stated.max_speed_m_per_s) is not None:
            continue
        rolled_m = 0.5 * float(factors[0] * np.abs(left).sum() + factors[1] * np.abs(right).sum())
        row = misclosures(CountsStack([(left, right)], lever), closures, parameters)[0]
        place = float(np.abs(np.delete(row, HEADING)).max())
        if place < _EXPLAINS_M + _EXPLAINS_SHARE * rolled_m and abs(float(row[HEADING])) < _EXPLAINS_RAD:
            return f"fits as: {reading.guess}"
    return "none of the usual mistakes (side negated, sides exchanged, other counts a turn, reset, other width) fits"
