"""Propose a calibration: fitted from runs, or entered by hand."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

import numpy as np

from registry.domain.calibration import Calibration, CalibrationResult, CalibrationRun, Kind, Matrix3, Observed
from registry.domain.person import Actor
from registry.domain.run import Run
from registry.domain.settling import SETTLING_RUN
from registry.domain.tolerance import QUANTITIES, QUANTITY_WORDS
from registry.domain.vehicle import Parameters, VehicleVersion
from registry.errors import Conflict, FieldError, Invalid, NotObserved
from registry.numerics.arrays import Bool, Float
from registry.numerics.closure_map import CountsStack, MapStack
from registry.numerics.fit import METHOD_VERSION, Fit, Hold, fit, misclosures
from registry.numerics.observability import observed, quantity_covariance, to_quantities
from registry.numerics.start_values import find_start
from registry.procedures import authority
from registry.procedures.evidence import Evidence, misclosure_of, parameter_array, parameters_of
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


@dataclass(frozen=True)
class _Question:
    """What a baseline is asked of: the runs and what is known beside them."""

    version: VehicleVersion
    runs: tuple[Run, ...]
    in_force: Calibration | None
    supplier: Calibration | None
    window_end: datetime | None


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
        Another calibration came into force while this one was fitted.
    """
    authority.require(actor, "technician")
    now = services.now()
    with services.read() as c:
        question = _ask(c, vehicle_id, run_ids, now)
        result = _answer(c, question, note)
    return propose(services, actor, vehicle_id, result, question.in_force)


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
        A value or uncertainty is not above zero.
    """
    authority.require(actor, "technician")
    names = ("left_mm_per_tick", "right_mm_per_tick", "width_mm")
    errors = [
        FieldError(f"/{name}", "must be above 0")
        for name, v in zip(names, parameters.as_tuple(), strict=True)
        if not v > 0
    ]
    errors += [FieldError(f"/u/{name}", "must be above 0") for name, u in zip(names, u_m, strict=True) if not u > 0]
    if errors:
        raise Invalid("the values cannot be taken as they are", tuple(errors))
    relative = np.array(u_m) / parameter_array(parameters)
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
    return propose(services, actor, vehicle_id, result, in_force)


def propose(
    services: Services, actor: Actor, vehicle_id: str, result: CalibrationResult, in_force: Calibration | None
) -> Calibration:
    """Record a result as a proposal, if what it started from is still in force.

    Raises
    ------
    Conflict
        Another calibration came into force meanwhile.
    """
    now = services.now()
    with services.write() as c:
        held = in_force_store.in_force(c, vehicle_id, now)
        based_on = None if in_force is None else in_force.calibration_id
        if (None if held is None else held.calibration_id) != based_on:
            raise Conflict("another calibration came into force meanwhile: propose again from it")
        made = calibration_store.add(c, services.new_id(), vehicle_id, result, based_on, now, str(actor))
        what = {"calibration_id": made.calibration_id, "number": made.number, "kind": result.kind, "note": result.note}
        journal.write(c, now, str(actor), "calibration proposed", vehicle_id, what)
    return made


def current_calibration(c: Connection, vehicle_id: str, at: datetime) -> Calibration | None:
    """The calibration in force at a time, if any."""
    held = in_force_store.in_force(c, vehicle_id, at)
    if held is None or held.calibration_id is None:
        return None
    return calibration_store.by_id(c, held.calibration_id)


def supplied_by(calibration: Calibration | None, window_end: datetime | None) -> Calibration | None:
    """The calibration that may lend a quantity its runs leave open: not a provisional one, nor one from before the
    work.
    """
    if calibration is None or calibration.result.kind == "provisional" or calibration.in_force_from is None:
        return None
    if window_end is not None and calibration.in_force_from < window_end:
        return None
    return calibration


def hold_from(calibration: Calibration, which: Bool) -> Hold:
    """Quantities of a calibration as supplied values for a fit."""
    array = parameter_array(calibration.result.parameters)
    covariance = quantity_covariance(np.array(calibration.result.covariance_relative), array)
    return Hold(which, to_quantities(array), covariance)


def calibration_result(
    kind: Kind, answer: Fit, seen: Bool, runs: tuple[CalibrationRun, ...], note: str | None
) -> CalibrationResult:
    """A fit as the content of a calibration."""
    tick_factor, side_ratio, width = (bool(value) for value in seen)
    return CalibrationResult(
        kind=kind,
        parameters=parameters_of(answer.parameters),
        covariance_relative=matrix(answer.covariance_relative),
        observed=Observed(tick_factor=tick_factor, side_ratio=side_ratio, width=width),
        runs=runs,
        birge_ratio=answer.birge_ratio,
        coverage_factor=answer.coverage_factor,
        random_error_m_per_sqrt_m=float(np.sqrt(answer.rolling_noise_m)),
        method_version=METHOD_VERSION,
        note=note,
    )


def contributions(runs: Sequence[Run], answer: Fit, before: Float) -> tuple[CalibrationRun, ...]:
    """What each run contributed to a fit; ``before`` (n, 4) are the misclosures by the parameters before it."""
    return tuple(
        CalibrationRun(
            run_id=run.run_id,
            weight=float(answer.weight[index]),
            before=misclosure_of(before[index], run.closure),
            after=misclosure_of(answer.residual[index], run.closure),
            influence=(
                float(answer.influence[index, 0]),
                float(answer.influence[index, 1]),
                float(answer.influence[index, 2]),
            ),
        )
        for index, run in enumerate(runs)
    )


def matrix(array: Float) -> Matrix3:
    """A (3, 3) array as nested tuples."""
    first, second, third = ((float(row[0]), float(row[1]), float(row[2])) for row in array)
    return (first, second, third)


def _ask(c: Connection, vehicle_id: str, run_ids: tuple[str, ...] | None, now: datetime) -> _Question:
    version = vehicle_store.current(c, vehicle_id)
    work = maintenance_store.latest_window_end(c, vehicle_id, now)
    window_end = None if work is None else work.done_at
    if run_ids is None:
        runs = run_store.usable(c, vehicle_id, started_from=window_end, ended_until=now)
    else:
        runs = run_store.by_ids(c, run_ids)
        _refuse_unfit(runs, vehicle_id, window_end)
    in_force = current_calibration(c, vehicle_id, now)
    return _Question(version, tuple(runs), in_force, supplied_by(in_force, window_end), window_end)


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
    if answer.status != "converged":
        raise _not_observed(np.zeros(3, dtype=np.bool_), "the runs contradict one another and the fit does not settle")
    seen = observed(answer.u_quantities, tolerance) & (answer.degrees_of_freedom >= _LEAST_DEGREES)
    if not seen.all():
        if question.supplier is None:
            raise _not_observed(seen, "the runs leave it open and no calibration in force supplies it")
        answer = fit(stack, evidence.closures, answer.parameters, hold_from(question.supplier, ~seen))
    before_by = question.version.statement.nominal if question.in_force is None else question.in_force.result.parameters
    before = misclosures(evidence.counts_stack(c), evidence.closures, parameter_array(before_by))
    return calibration_result("baseline", answer, seen, contributions(question.runs, answer, before), note)


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
