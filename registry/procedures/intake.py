"""Take a logged run onto the record, once for every door: check it, fold it, say what it is good for."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np

from registry.domain.person import Actor
from registry.domain.run import Misclosure, Run, RunState, Use
from registry.domain.vehicle import Parameters, VehicleVersion
from registry.errors import Conflict, FieldError, Invalid
from registry.numerics import closure_map, counters
from registry.numerics.arrays import Float
from registry.numerics.closure import HEADING, misclosure
from registry.numerics.stacks import CountsStack
from registry.procedures import authority
from registry.procedures.evidence import closures_of, levers_of, misclosure_of, parameter_array
from registry.procedures.run_checks import (
    MAX_KEY_LENGTH,
    MAX_SAMPLES,
    RunStatement,
    check,
    check_range,
    content_digest,
    plain_closure,
    sealed,
)
from registry.services import Services
from registry.storage import calibrations as calibration_store
from registry.storage import counts_blob, journal
from registry.storage import in_force as in_force_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

__all__ = [
    "MAX_KEY_LENGTH", "MAX_SAMPLES", "RunStatement", "check_run", "content_digest", "restore", "sealed", "set_aside",
    "take_run",
]  # fmt: skip

#: Below this the vehicle has not moved: a few millimetres of play in the drive are not a run.
_NO_MOTION_M = 0.02
#: Another reading of impossible counts explains them when it closes to this share of the way rolled.
_EXPLAINS_SHARE, _EXPLAINS_M, _EXPLAINS_RAD = 0.1, 0.1, 0.35


@dataclass(frozen=True)
class _Worked:
    """What the counts say, computed before anything is written."""

    use: Use
    reasons: tuple[str, ...]
    rolled_m: float
    turned_rad: float
    misclosure: Misclosure | None
    map_blob: bytes | None


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
    check(statement, now)
    statement = replace(statement, closure=plain_closure(statement.closure))
    with services.read() as c:
        version = vehicle_store.at(c, vehicle_id, statement.started_at)
        known = _known(c, vehicle_id, statement)
        if known is not None:
            return known, False
        # A run from before anything was in force is told how it closes by what is in force now.
        in_force = _parameters_at(c, vehicle_id, statement.started_at) or _parameters_at(c, vehicle_id, now)
        centre = _centre(c, version, now)
    check_range(statement, version.statement.counter_bits)
    worked = _work(statement, version, in_force, centre)
    blob = counts_blob.encode(statement.time_s, statement.left_counts, statement.right_counts)
    run = _run(services, actor, version, statement, worked, counts_blob.counts_digest(blob))
    with services.write() as c:
        known = _known(c, vehicle_id, statement)
        if known is not None:
            return known, False
        overlapping = run_store.overlapping(c, vehicle_id, run.started_at, run.ended_at)
        shared = tuple(f"overlaps in time with run {other.run_key}" for other in overlapping)
        run = replace(run, reasons=run.reasons + shared)
        run_store.add(c, run, blob, worked.map_blob)
        what = {"run_id": run.run_id, "run_key": run.run_key, "use": run.use, "counts_digest": run.counts_digest}
        journal.write(c, now, str(actor), "run recorded", vehicle_id, what)
    return run, True


def check_run(services: Services, actor: Actor, vehicle_id: str, statement: RunStatement) -> None:
    """Refuse what `take_run` would refuse, recording nothing: a whole manifest is checked before a run is taken."""
    authority.require_vehicle(actor, vehicle_id, "technician")
    check(statement, services.now())
    with services.read() as c:
        version = vehicle_store.at(c, vehicle_id, statement.started_at)
        _known(c, vehicle_id, statement)
    check_range(statement, version.statement.counter_bits)


def set_aside(services: Services, actor: Actor, run_id: str, reason: str) -> Run:
    """Take a run out of use, with a reason. A technician may set aside runs they recorded; others need an approver."""
    return _restate(services, actor, run_id, "set aside", reason)


def restore(services: Services, actor: Actor, run_id: str, reason: str) -> Run:
    """Put a run back into use, with a reason.

    Raises
    ------
    Conflict
        It is in use, or its counts are so broken that no fit could take them.
    """
    authority.require(actor, "approver")
    return _restate(services, actor, run_id, "usable", reason)


def _restate(services: Services, actor: Actor, run_id: str, use: Use, reason: str) -> Run:
    authority.require(actor, "technician")
    if not reason.strip():
        raise Invalid("a reason is needed", (FieldError("/reason", "say why, in a few words"),))
    now = services.now()
    with services.write() as c:
        run = run_store.by_id(c, run_id)
        if run.recorded_by != str(actor):
            authority.require(actor, "approver")
        if run.use == use:
            raise Conflict(f"run {run.run_key} is already {use}")
        if use == "usable" and not run_store.maps(c, [run_id]):
            raise Conflict(
                f"run {run.run_key} cannot be used: its counts jump too far; load it again with sound counts"
            )
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
    return calibration_store.parameters_by_id(c, held.calibration_id)


def _centre(c: Connection, version: VehicleVersion, now: datetime) -> Parameters:
    """Around which parameters a run is folded: those that evaluations start from, else the ruler's."""
    return _parameters_at(c, version.vehicle_id, now) or version.statement.nominal


def _run(
    services: Services, actor: Actor, version: VehicleVersion, statement: RunStatement, worked: _Worked, digest: str
) -> Run:
    duration_s = float(statement.time_s[-1] - statement.time_s[0])
    return Run(
        run_id=services.new_id(),
        vehicle_id=version.vehicle_id,
        run_key=statement.run_key,
        vehicle_version=version.version,
        started_at=statement.started_at,
        ended_at=statement.started_at + timedelta(seconds=duration_s),
        duration_s=duration_s,
        samples=int(statement.time_s.size),
        distance_m=worked.rolled_m,
        turned_rad=worked.turned_rad,
        closure=statement.closure,
        conditions=statement.conditions,
        misclosure=worked.misclosure,
        content_digest=statement.content_digest,
        counts_digest=digest,
        use=worked.use,
        reasons=worked.reasons,
        recorded_at=services.now(),
        recorded_by=str(actor),
    )


def _work(statement: RunStatement, version: VehicleVersion, in_force: Parameters | None, centre: Parameters) -> _Worked:
    stated = version.statement
    left = counters.increments(statement.left_counts, stated.counter_bits)
    right = counters.increments(statement.right_counts, stated.counter_bits)
    array, middle = parameter_array(in_force or centre), parameter_array(centre)
    reasons = _reasons(statement, version, (left, right), array)
    foldable = closure_map.is_foldable(left, right, middle)
    if not reasons and not foldable:
        reasons = ("logged too seldom: the sides turn it many times between two samples; log more often",)
    closed = None
    if in_force is not None:
        poses = CountsStack([(left, right)], levers_of([version])).poses(array)
        closed = misclosure_of(misclosure(closures_of([statement.closure]), poses)[0], statement.closure)
    return _Worked(
        use="set aside" if reasons else "usable",
        reasons=reasons,
        rolled_m=_rolled_m(left, right, array),
        turned_rad=float(array[1] * right.sum() - array[0] * left.sum()) / float(array[2]),
        misclosure=closed,
        map_blob=closure_map.encode(closure_map.fold(left, right, middle)) if foldable else None,
    )


def _reasons(
    statement: RunStatement, version: VehicleVersion, ticks: tuple[Float, Float], parameters: Float
) -> tuple[str, ...]:
    """Why a well-formed run cannot be used; nothing when it can."""
    limit = version.statement.max_speed_m_per_s
    factors = (float(parameters[0]), float(parameters[1]))
    step = counters.first_impossible_step(*ticks, statement.time_s, factors, limit)
    if step is not None:
        # In the unit of the field of the door, so that the two can be held against each other.
        speed = f"{step.side} {1000.0 * step.speed_m_per_s:.0f} mm/s, at most {1000.0 * limit:.12g} mm/s"
        return (f"impossible speed at sample {step.sample}: {speed}; {_explanation(statement, version, parameters)}",)
    rolled_m = _rolled_m(*ticks, parameters)
    if rolled_m < _NO_MOTION_M:
        return (f"no motion: the sides rolled {rolled_m * 1000.0:.0f} mm",)
    return ()


def _rolled_m(left: Float, right: Float, parameters: Float) -> float:
    return 0.5 * float(parameters[0] * np.abs(left).sum() + parameters[1] * np.abs(right).sum())


def _explanation(statement: RunStatement, version: VehicleVersion, parameters: Float) -> str:
    """Which usual mistake makes the counts possible and the run close; or what comes nearest to that."""
    stated = version.statement
    closures, lever = closures_of([statement.closure]), levers_of([version])
    factors = (float(parameters[0]), float(parameters[1]))
    possible = None
    for reading in _other_readings(statement, version, factors):
        left, right = reading.left_ticks, reading.right_ticks
        if counters.first_impossible_step(left, right, statement.time_s, factors, stated.max_speed_m_per_s) is not None:
            continue
        possible = possible or reading.guess
        row = misclosure(closures, CountsStack([(left, right)], lever).poses(parameters))[0]
        place = float(np.abs(np.delete(row, HEADING)).max())
        near_m = _EXPLAINS_M + _EXPLAINS_SHARE * _rolled_m(left, right, parameters)
        if place < near_m and abs(float(row[HEADING])) < _EXPLAINS_RAD:
            return f"fits as: {reading.guess}"
    if possible is not None:
        return f"possible as: {possible}, but then it does not end where it was read"
    return "none of the usual mistakes (side negated, sides exchanged, other counts a turn, reset, other width) fits"


def _other_readings(
    statement: RunStatement, version: VehicleVersion, m_per_tick: tuple[float, float]
) -> Iterator[counters.Reading]:
    bits, limit = version.statement.counter_bits, version.statement.max_speed_m_per_s
    sides = statement.left_counts, statement.right_counts
    left, right = (
        counters.impossible_steps(counters.increments(counts, bits), statement.time_s, factor, limit)
        for counts, factor in zip(sides, m_per_tick, strict=True)
    )
    return counters.other_readings(*sides, bits, (left, right))
