"""Propose a calibration: fitted from runs, or entered by hand."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

import numpy as np

from registry.domain.calibration import Calibration, CalibrationResult, Kind, Observed
from registry.domain.person import Actor
from registry.domain.run import Run
from registry.domain.settling import SETTLING_RUN
from registry.domain.tolerance import QUANTITIES, QUANTITY_WORDS
from registry.domain.vehicle import Parameters, VehicleVersion
from registry.errors import Conflict, FieldError, Invalid, NotObserved
from registry.numerics.arrays import Bool
from registry.numerics.fit import METHOD_VERSION, Fit, fit, misclosures
from registry.numerics.observability import observed
from registry.numerics.stacks import CountsStack, MapStack
from registry.numerics.start_values import find_start
from registry.procedures import authority
from registry.procedures.calibration_results import (
    calibration_result,
    contributions,
    current_calibration,
    held_fit,
    hold_from,
    matrix,
    supplier_of,
)
from registry.procedures.evidence import Evidence, parameter_array, parameters_of
from registry.services import Services
from registry.storage import calibrations as calibration_store
from registry.storage import in_force as in_force_store
from registry.storage import journal
from registry.storage import maintenance as maintenance_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

#: The start search integrates counts; more runs than this do not make it surer.
_SEARCH_RUNS = 40
#: Half of the runs within this normal score: the start was good and no whole turn was lost.
_GOOD_START_SCORE = 2.0
#: The fit's covariance needs at least this much more evidence than quantities.
_LEAST_DEGREES = 1.0
#: Bounds of what may be entered: lengths in metres, and the least relative uncertainty.
_LARGEST_M, _SMALLEST_U = 1e3, 1e-9


@dataclass(frozen=True)
class _Question:
    """What a baseline is asked of: the runs and what is known beside them."""

    version: VehicleVersion
    runs: tuple[Run, ...]
    in_force: Calibration | None
    supplier: Calibration | None


def propose_baseline(
    services: Services, actor: Actor, vehicle_id: str, run_ids: tuple[str, ...] | None, note: str | None
) -> Calibration:
    """Fit a baseline to usable runs and propose it.

    Parameters
    ----------
    run_ids
        The runs to use; None is all usable runs since the last maintenance that ends the window.

    Raises
    ------
    NotObserved
        The runs leave a quantity open that the calibration in force does not supply; one error a quantity.
    Conflict
        While this one was fitted another calibration came into force, or a run that it rests on fell out of use.
    """
    authority.require(actor, "technician")
    with services.read() as c:
        question = _ask(c, vehicle_id, run_ids, services.now())
        result = _answer(c, question, note)
    return _propose(services, actor, vehicle_id, result, question.in_force)


def propose_entered(
    services: Services,
    actor: Actor,
    vehicle_id: str,
    kind: Kind,
    parameters: Parameters,
    u_m: tuple[float, float, float],
    note: str | None,
) -> Calibration:
    """Propose values from elsewhere: ``entered`` with a stated uncertainty, or ``provisional`` to drive calibration
    runs.

    Parameters
    ----------
    u_m : (float, float, float)
        Standard uncertainties of (left, right, width) in metres per tick and metres.

    Raises
    ------
    Invalid
        The kind is none to enter, a value or uncertainty is not above zero, or the uncertainty is absurd.
    """
    authority.require(actor, "technician")
    _refuse_entry(kind, parameters, u_m)
    parameters = parameters_of(parameter_array(parameters))
    relative = np.array(u_m, dtype=np.float64) / parameter_array(parameters)
    with services.read() as c:
        vehicle_store.current(c, vehicle_id)
        in_force = current_calibration(c, vehicle_id, services.now())
    result = CalibrationResult(
        kind=kind,
        parameters=parameters,
        covariance_relative=matrix(np.diag(relative**2)),
        observed=Observed(tick_factor=False, side_ratio=False, width=False),
        method_version=METHOD_VERSION,
        note=note,
    )
    return _propose(services, actor, vehicle_id, result, in_force)


def _refuse_entry(kind: Kind, parameters: Parameters, u_m: tuple[float, float, float]) -> None:
    errors: list[FieldError] = []
    if kind not in ("entered", "provisional"):
        errors.append(FieldError("/kind", "must be entered or provisional: the other kinds come from runs"))
    for name, value, u in zip(
        ("left_mm_per_tick", "right_mm_per_tick", "width_mm"), parameters.as_tuple(), u_m, strict=True
    ):
        if not 0.0 < value <= _LARGEST_M:
            errors.append(FieldError(f"/{name}", "must be above 0, and of a size that a vehicle can have"))
        if not 0.0 < u <= _LARGEST_M:
            errors.append(FieldError(f"/u/{name}", "must be above 0: no value is known exactly"))
        elif value > 0.0 and not _SMALLEST_U <= u / value <= 1.0:
            detail = "must be between a billionth of the value and the value itself: check the unit"
            errors.append(FieldError(f"/u/{name}", detail))
    if errors:
        raise Invalid("the values cannot be taken as they are", tuple(errors))


def _propose(
    services: Services, actor: Actor, vehicle_id: str, result: CalibrationResult, in_force: Calibration | None
) -> Calibration:
    """Record a result as a proposal, if what it started from still holds: a fit takes seconds and the world moves."""
    now = services.now()
    with services.write() as c:
        held = in_force_store.in_force(c, vehicle_id, now)
        based_on = None if in_force is None else in_force.calibration_id
        if (None if held is None else held.calibration_id) != based_on:
            raise Conflict("another calibration came into force meanwhile: propose again from it")
        _refuse_outdated(c, vehicle_id, result, now)
        made = calibration_store.add(c, services.new_id(), vehicle_id, result, based_on, now, str(actor))
        what = {"calibration_id": made.calibration_id, "number": made.number, "kind": result.kind, "note": result.note}
        journal.write(c, now, str(actor), "calibration proposed", vehicle_id, what)
    return made


def _refuse_outdated(c: Connection, vehicle_id: str, result: CalibrationResult, now: datetime) -> None:
    """The runs behind a result must still be usable, and no work may have come between them and now."""
    work = maintenance_store.latest_window_end(c, vehicle_id, now)
    for run in run_store.by_ids(c, [one.run_id for one in result.runs]):
        if run.use != "usable":
            raise Conflict(f"run {run.run_key} was set aside meanwhile: propose again without it")
        if work is not None and run.started_at < work.done_at:
            raise Conflict("work that ends the window was recorded meanwhile: propose again from the runs after it")


def _ask(c: Connection, vehicle_id: str, run_ids: tuple[str, ...] | None, now: datetime) -> _Question:
    version = vehicle_store.current(c, vehicle_id)
    work = maintenance_store.latest_window_end(c, vehicle_id, now)
    window_end = None if work is None else work.done_at
    if run_ids is None:
        runs = run_store.usable(c, vehicle_id, started_from=window_end)
    else:
        runs = run_store.by_ids(c, run_ids)
        _refuse_unfit(runs, vehicle_id, window_end)
    in_force = current_calibration(c, vehicle_id, now)
    return _Question(version, tuple(runs), in_force, supplier_of(c, in_force, now))


def _refuse_unfit(runs: Sequence[Run], vehicle_id: str, window_end: datetime | None) -> None:
    errors: list[FieldError] = []
    seen: set[str] = set()
    for index, run in enumerate(runs):
        pointer = f"/run_ids/{index}"
        if run.vehicle_id != vehicle_id:
            errors.append(FieldError(pointer, f"run {run.run_key} is of vehicle {run.vehicle_id}"))
        elif run.run_id in seen:
            errors.append(FieldError(pointer, f"run {run.run_key} is named twice"))
        elif run.use != "usable":
            errors.append(FieldError(pointer, f"run {run.run_key} is set aside: restore it first, or leave it out"))
        elif window_end is not None and run.started_at < window_end:
            detail = f"run {run.run_key} was driven before the work of {window_end:%Y-%m-%d %H:%M} UTC: leave it out"
            errors.append(FieldError(pointer, detail))
        seen.add(run.run_id)
    if errors:
        raise Invalid("some of the runs cannot be used", tuple(errors))


def _answer(c: Connection, question: _Question, note: str | None) -> CalibrationResult:
    if not question.runs:
        raise _not_observed(np.zeros(3, dtype=np.bool_), "there is no usable run")
    evidence = Evidence(c, question.runs)
    tolerance = np.array(question.version.statement.tolerance.as_tuple())
    stack, answer = _free_fit(c, evidence, question)
    seen = observed(answer.u_quantities, tolerance) & (answer.degrees_of_freedom >= _LEAST_DEGREES)
    if answer.status == "converged" and not seen.all():
        if question.supplier is None:
            raise _not_observed(seen, "the runs leave it open and no calibration in force supplies it")
        stack, answer = held_fit(c, evidence, stack, answer, hold_from(question.supplier, ~seen))
    if answer.status != "converged":
        raise _not_observed(np.zeros(3, dtype=np.bool_), "the runs contradict one another and the fit does not settle")
    before_by = question.version.statement.nominal if question.in_force is None else question.in_force.result.parameters
    if not stack.inside(parameter_array(before_by)).all():
        stack = evidence.counts_stack(c)
    before = misclosures(stack, evidence.closures, parameter_array(before_by))
    made = contributions(question.runs, answer, before)
    return calibration_result("baseline", answer, seen, question.supplier, made, note)


def _free_fit(c: Connection, evidence: Evidence, question: _Question) -> tuple[MapStack | CountsStack, Fit]:
    """The fit with nothing held: from what is in force where that is near, else after a search over whole turns."""
    if question.supplier is not None:
        maps = evidence.map_stack(c)
        if maps is not None:
            answer = fit(maps, evidence.closures, parameter_array(question.supplier.result.parameters))
            if answer.status == "converged" and float(np.median(answer.normalised)) < _GOOD_START_SCORE:
                return maps, answer
    ticks = evidence.ticks(c)
    some = np.arange(len(ticks)) < _SEARCH_RUNS
    start = find_start(
        ticks[:_SEARCH_RUNS],
        evidence.levers_m[some],
        evidence.closures.take(some),
        parameter_array(question.version.statement.nominal),
    )
    counts = CountsStack(ticks, evidence.levers_m)
    return counts, fit(counts, evidence.closures, start)


def _not_observed(seen: Bool, why: str) -> NotObserved:
    errors = tuple(
        FieldError(f"/{name}", f"{QUANTITY_WORDS[name]}: {why}; {SETTLING_RUN[name]}")
        for name, known in zip(QUANTITIES, seen, strict=True)
        if not known
    )
    return NotObserved("the runs do not determine every quantity that a baseline needs", errors)
