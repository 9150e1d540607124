"""One scheduled look at a vehicle: fit its recent runs, compare with what is in force, propose and alert.

The fit happens outside the write; the write checks that what it started from still holds. An evaluation never changes
what
is in force: it proposes, and a person adopts.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np

from registry.domain import judgement
from registry.domain.calibration import Calibration, CalibrationResult
from registry.domain.evaluation import Evaluation, EvaluationResult, QuantityFinding
from registry.domain.run import Run
from registry.domain.tolerance import QUANTITIES
from registry.domain.vehicle import VehicleVersion
from registry.numerics import closure_map
from registry.numerics.arrays import Bool, Float
from registry.numerics.closure_map import ClosureMap, CountsStack, MapStack
from registry.numerics.conformity import ACT_AT, WATCH_AT, probability_beyond
from registry.numerics.fit import DEFAULT_ROLLING_NOISE_M, Fit, fit, misclosures, scores_against
from registry.numerics.observability import (
    deviation,
    observed,
    quantity_covariance,
    relative_from_quantities,
    to_parameters,
    to_quantities,
)
from registry.numerics.recent import last_break
from registry.procedures import alerting
from registry.procedures.baseline import (
    calibration_result,
    contributions,
    current_calibration,
    hold_from,
)
from registry.procedures.boot_sheets import refresh_sheet
from registry.procedures.evidence import Evidence, parameter_array, parameters_of, refold
from registry.services import Services
from registry.storage import alerts as alert_store
from registry.storage import boots as boot_store
from registry.storage import calibrations as calibration_store
from registry.storage import evaluations as evaluation_store
from registry.storage import in_force as in_force_store
from registry.storage import journal, leases
from registry.storage import maintenance as maintenance_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

#: A new proposal replaces an open one when it differs by more than its own standard uncertainty, or is this much surer.
_SURER = 0.7
_LEAST_DEGREES = 1.0
#: Runs that leave every quantity looser than this (relative) do not stand for a state of their own.
_TELLS_SOMETHING = 0.01


@dataclass(frozen=True)
class Holder:
    """The lease a pass works under: what it writes is refused once another holds it."""

    name: str
    holder: str
    fence: int


class LeaseLost(Exception):  # noqa: N818 - says what happened
    """Another process took the pass over; nothing of this one is written any more."""


@dataclass(frozen=True)
class _Question:
    """What a pass looks at for one vehicle, and the text that tells whether anything is new."""

    version: VehicleVersion
    in_force: Calibration | None
    runs: tuple[Run, ...]
    inputs: str
    last: Evaluation | None


@dataclass(frozen=True)
class _Fitted:
    """Runs and what a fit says of them; ``new_maps`` where the old ones did not reach."""

    evidence: Evidence
    stack: MapStack | CountsStack
    answer: Fit
    new_maps: dict[str, ClosureMap]


@dataclass(frozen=True)
class _Answer:
    """What the fit says, with everything that must be written."""

    result: EvaluationResult
    confirmed: tuple[bool, bool, bool]
    proposal: CalibrationResult | None
    new_maps: dict[str, ClosureMap]


def evaluate_vehicle(
    services: Services, vehicle_id: str, as_of: datetime, *, holder: Holder | None = None, force: bool = False
) -> Evaluation | None:
    """Judge a vehicle as of a time with everything known now; None when nothing is new since its last evaluation.

    Parameters
    ----------
    holder
        The lease of the pass, if it works under one.
    force
        Evaluate though nothing is new.

    Raises
    ------
    LeaseLost
        The lease went to another process before the result could be written.
    """
    with services.read() as c:
        question = _ask(c, services, vehicle_id, as_of)
        unchanged = question.last is not None and question.last.inputs == question.inputs
        idle = question.in_force is None or not question.runs or (unchanged and not force)
        answer = None if idle else _answer(c, question)
    with services.write() as c:
        _still_ours(c, services, holder)
        _clear_on_new_ground(c, services, question, as_of)
        evaluation = None
        if answer is not None and question.in_force is not None and _same_ground(c, question, vehicle_id, as_of):
            evaluation = _record(c, services, question, answer, as_of)
        _ask_for_silence(c, services, question.version, as_of)
        _ask_for_loading(c, services, question, as_of)
        if evaluation is not None or question.last is None or _moved(question):
            refresh_sheet(c, vehicle_id, services.now())
    return evaluation


def _ask(c: Connection, services: Services, vehicle_id: str, as_of: datetime) -> _Question:
    version = vehicle_store.at(c, vehicle_id, as_of)
    in_force = current_calibration(c, vehicle_id, as_of)
    work = maintenance_store.latest_window_end(c, vehicle_id, as_of)
    begins = [] if work is None else [work.done_at]
    runs: list[Run] = []
    if in_force is not None:
        begins.append(_evidence_end(c, in_force))
        runs = run_store.usable(
            c,
            vehicle_id,
            started_from=max(begins),
            ended_until=as_of,
            limit=services.settings.window_runs,
        )
        made = {one.run_id for one in in_force.result.runs}
        runs = [run for run in runs if run.run_id not in made]
    parts = (
        "" if in_force is None else in_force.calibration_id,
        str(version.version),
        "" if work is None else work.maintenance_id,
        run_store.changes_mark(c, vehicle_id, as_of),
    )
    inputs = hashlib.sha256("|".join(parts).encode()).hexdigest()[:32]
    last = evaluation_store.latest(c, vehicle_id, as_of)
    return _Question(version, in_force, tuple(reversed(runs)), inputs, last)


def _evidence_end(c: Connection, calibration: Calibration) -> datetime:
    """Deviations are judged on runs after those that made the calibration; without runs, from when it came into
    force.
    """
    last = calibration_store.last_run_at(c, calibration.calibration_id)
    if last is not None:
        return last
    return calibration.in_force_from or calibration.recorded_at


def _answer(c: Connection, question: _Question) -> _Answer | None:
    calibration = question.in_force
    if calibration is None:
        return None
    fitted = _fit(c, question.runs, calibration)
    quantities, confirmed = _judge(fitted.answer, calibration, question.version)
    result = _result(fitted, calibration, quantities, confirmed)
    proposal = None
    if result.finding == "beyond":
        proposal = _proposal(fitted, np.array([item.observed for item in quantities]), calibration)
    return _Answer(result, confirmed, proposal, fitted.new_maps)


def _fit(c: Connection, runs: tuple[Run, ...], calibration: Calibration) -> _Fitted:
    """Fit the runs that belong to the vehicle's latest state, from their maps where these reach, else from the counts.

    A robust fit stays with the majority, so that a change would stay unseen until most of the window was driven after
    it.
    Therefore runs from which on the calibration in force no longer fits are judged alone, when they tell anything.
    """
    evidence = Evidence(c, runs)
    reference = parameter_array(calibration.result.parameters)
    covariance = quantity_covariance(np.array(calibration.result.covariance_relative), reference)
    noise = calibration.result.random_error_m_per_sqrt_m
    guess = DEFAULT_ROLLING_NOISE_M if noise is None else noise**2
    stack: MapStack | CountsStack | None = evidence.map_stack(c)
    if stack is None or not bool(stack.inside(reference).all()):
        stack = evidence.counts_stack(c)
    begin = last_break(scores_against(stack, evidence.closures, reference, covariance, guess))
    if begin > 0:
        latest = _fit_all(c, evidence.since(begin), reference, guess)
        if latest.answer.status == "converged" and bool(np.any(latest.answer.u_quantities < _TELLS_SOMETHING)):
            return latest
    return _fit_all(c, evidence, reference, guess)


def _fit_all(c: Connection, evidence: Evidence, reference: Float, guess: float) -> _Fitted:
    """Fit all the runs; where their maps do not reach, integrate the counts and make new maps round the outcome."""
    stack: MapStack | CountsStack | None = evidence.map_stack(c)
    if stack is not None:
        answer = fit(stack, evidence.closures, reference, rolling_guess_m=guess)
        if answer.status != "outside maps":
            return _Fitted(evidence, stack, answer, {})
    stack = evidence.counts_stack(c)
    answer = fit(stack, evidence.closures, reference, rolling_guess_m=guess)
    return _Fitted(evidence, stack, answer, refold(c, evidence, answer.parameters))


def _seen(answer: Fit, version: VehicleVersion) -> Bool:
    """Which quantities (3,) the runs behind a fit determine."""
    tolerance = np.array(version.statement.tolerance.as_tuple())
    settled = answer.status == "converged" and answer.degrees_of_freedom >= _LEAST_DEGREES
    return observed(answer.u_quantities, tolerance) & settled


def _judge(
    answer: Fit, calibration: Calibration, version: VehicleVersion
) -> tuple[tuple[QuantityFinding, QuantityFinding, QuantityFinding], tuple[bool, bool, bool]]:
    """Deviation of each observed quantity, and whether it would stay likely beyond without any single run."""
    reference = parameter_array(calibration.result.parameters)
    tolerance = np.array(version.statement.tolerance.as_tuple())
    away = deviation(answer.parameters, reference)
    seen = _seen(answer, version)
    own = quantity_covariance(np.array(calibration.result.covariance_relative), reference)
    u = np.sqrt(answer.u_quantities**2 + np.diag(own))
    without = _without_each_run(answer, reference)
    degrees = max(1.0, answer.degrees_of_freedom)
    findings: list[QuantityFinding] = []
    confirmed: list[bool] = []
    for index in range(3):
        if not seen[index]:
            findings.append(QuantityFinding(None, None, observed=False, probability_beyond=None))
            confirmed.append(False)
            continue
        limit, sigma = float(tolerance[index]), float(u[index])
        probability = probability_beyond(float(away[index]), sigma, -limit, limit, degrees)
        rest = [probability_beyond(float(value), sigma, -limit, limit, degrees) for value in without[:, index]]
        findings.append(QuantityFinding(float(away[index]), sigma, observed=True, probability_beyond=probability))
        confirmed.append(len(rest) > 1 and min(rest) >= WATCH_AT)
    return (findings[0], findings[1], findings[2]), (confirmed[0], confirmed[1], confirmed[2])


def _without_each_run(answer: Fit, reference: Float) -> Float:
    """Deviations (n, 3) of the quantities with each run left out."""
    ratio = float(answer.parameters[1] / answer.parameters[0]) - 1.0
    moved = answer.influence @ np.linalg.inv(relative_from_quantities(ratio)).T
    centre = to_quantities(answer.parameters)
    return np.array([deviation(to_parameters(centre + step), reference) for step in moved]).reshape(-1, 3)


def _result(
    fitted: _Fitted,
    calibration: Calibration,
    quantities: tuple[QuantityFinding, QuantityFinding, QuantityFinding],
    confirmed: tuple[bool, bool, bool],
) -> EvaluationResult:
    worst = [
        sure
        for item, sure in zip(quantities, confirmed, strict=True)
        if item.probability_beyond is not None and item.probability_beyond >= ACT_AT
    ]
    agreed = not worst or any(worst)
    finding = judgement.finding_of(quantities, confirmed=agreed)
    answer, runs = fitted.answer, fitted.evidence.runs
    u_relative = np.sqrt(np.diag(answer.covariance_relative))
    return EvaluationResult(
        against=calibration.calibration_id,
        runs_used=len(runs),
        first_run_at=runs[0].started_at,
        last_run_at=runs[-1].started_at,
        tick_factor=quantities[0],
        side_ratio=quantities[1],
        width=quantities[2],
        fitted=parameters_of(answer.parameters),
        fitted_u_relative=(float(u_relative[0]), float(u_relative[1]), float(u_relative[2])),
        coverage_factor=answer.coverage_factor,
        finding=finding,
        message=judgement.message_of(quantities, finding, len(runs), confirmed=agreed),
    )


def _proposal(fitted: _Fitted, seen: Bool, calibration: Calibration) -> CalibrationResult:
    """The fit as a calibration; what the runs do not tell is copied from the one in force."""
    evidence, answer = fitted.evidence, fitted.answer
    if not seen.all():
        answer = fit(fitted.stack, evidence.closures, answer.parameters, hold_from(calibration, ~seen))
    before = misclosures(fitted.stack, evidence.closures, parameter_array(calibration.result.parameters))
    note = f"proposed by the evaluation of {len(evidence.runs)} runs"
    return calibration_result("evaluation", answer, seen, contributions(evidence.runs, answer, before), note)


def _same_ground(c: Connection, question: _Question, vehicle_id: str, as_of: datetime) -> bool:
    """Whether the calibration that the fit started from is still the one in force at that time."""
    held = in_force_store.in_force(c, vehicle_id, as_of)
    return (
        held is not None and question.in_force is not None and held.calibration_id == question.in_force.calibration_id
    )


def _record(c: Connection, services: Services, question: _Question, answer: _Answer, as_of: datetime) -> Evaluation:
    vehicle_id, now = question.version.vehicle_id, services.now()
    for run_id, item in answer.new_maps.items():
        run_store.put_map(c, run_id, closure_map.encode(item))
    proposal = _keep_one_proposal(c, services, question, answer.proposal)
    evaluation = Evaluation(
        evaluation_id=services.new_id(),
        vehicle_id=vehicle_id,
        as_of=as_of,
        recorded_at=now,
        result=answer.result,
        proposed_calibration_id=None if proposal is None else proposal.calibration_id,
        inputs=question.inputs,
    )
    evaluation_store.add(c, evaluation)
    what = {
        "evaluation_id": evaluation.evaluation_id,
        "finding": answer.result.finding,
        "message": answer.result.message,
    }
    journal.write(c, now, "schedule", "evaluated", vehicle_id, what)
    _follow_alerts(c, services, question, answer, proposal, as_of)
    return evaluation


def _keep_one_proposal(
    c: Connection, services: Services, question: _Question, wanted: CalibrationResult | None
) -> Calibration | None:
    """One open proposal of an evaluation a vehicle: kept while it still says the same, else superseded by the new
    one.
    """
    vehicle_id, now = question.version.vehicle_id, services.now()
    held = None if question.in_force is None else question.in_force.calibration_id
    standing = calibration_store.open_proposals(c, vehicle_id, "evaluation")
    if wanted is not None and standing and standing[-1].based_on == held and _says_the_same(standing[-1], wanted):
        return standing[-1]
    for old in standing:
        reason = "a later evaluation says otherwise"
        calibration_store.add_standing(c, old.calibration_id, "superseded", now, "schedule", reason)
    if wanted is None:
        return None
    made = calibration_store.add(c, services.new_id(), vehicle_id, wanted, held, now, "schedule")
    what = {"calibration_id": made.calibration_id, "number": made.number, "kind": "evaluation"}
    journal.write(c, now, "schedule", "calibration proposed", vehicle_id, what)
    return made


def _says_the_same(old: Calibration, new: CalibrationResult) -> bool:
    array = parameter_array(new.parameters)
    moved = np.abs(array / parameter_array(old.result.parameters) - 1.0)
    u_new = np.sqrt(np.diag(np.array(new.covariance_relative)))
    u_old = np.sqrt(np.diag(np.array(old.result.covariance_relative)))
    return bool(np.all(moved <= u_old) and np.all(u_new > _SURER * u_old) and old.result.observed == new.observed)


def _follow_alerts(
    c: Connection,
    services: Services,
    question: _Question,
    answer: _Answer,
    proposal: Calibration | None,
    as_of: datetime,
) -> None:
    vehicle_id, stated = question.version.vehicle_id, question.version.statement
    open_causes = {one.content.cause() for one in alert_store.open_for(c, vehicle_id) if one.standing != "returned"}
    for index, quantity in enumerate(QUANTITIES):
        item = answer.result.quantities()[index]
        cause = f"beyond_tolerance:{quantity}"
        holds = judgement.holds_beyond(item, was_open=cause in open_causes, confirmed=answer.confirmed[index])
        if holds is True and question.in_force is not None:
            content = judgement.beyond_tolerance(
                stated.name, quantity, answer.result, stated.tolerance, question.in_force, proposal
            )
            alerting.raise_or_update(c, services, vehicle_id, content, as_of)
        elif holds is False:
            alerting.clear(c, services, vehicle_id, cause, as_of, answer.result.message)


def _moved(question: _Question) -> bool:
    """Whether another calibration is in force than the one that the last evaluation was against."""
    held = None if question.in_force is None else question.in_force.calibration_id
    return question.last is not None and question.last.result.against != held


def _clear_on_new_ground(c: Connection, services: Services, question: _Question, as_of: datetime) -> None:
    """What an evaluation said against another calibration than the one in force no longer holds."""
    if _moved(question):
        alerting.clear_deviations(c, services, question.version.vehicle_id, as_of, "another calibration is in force")


def _ask_for_silence(c: Connection, services: Services, version: VehicleVersion, as_of: datetime) -> None:
    days = services.settings.silence_days
    last_at = run_store.latest_end(c, version.vehicle_id, as_of)
    since = last_at or vehicle_store.versions(c, version.vehicle_id)[0].recorded_at
    if as_of - since > timedelta(days=days):
        content = judgement.no_evidence(version.statement.name, last_at, as_of, days)
        known = [one for one in alert_store.open_for(c, version.vehicle_id) if one.content.cause() == "no_evidence"]
        # The sentence counts days; an open alert is not rewritten every day for that.
        if not known or known[0].standing == "returned":
            alerting.raise_or_update(c, services, version.vehicle_id, content, as_of)
    else:
        note = "a usable run came in"
        alerting.clear(c, services, version.vehicle_id, "no_evidence", as_of, note)


def _ask_for_loading(c: Connection, services: Services, question: _Question, as_of: datetime) -> None:
    """Days after an adoption the vehicle's last boot must have loaded what is in force."""
    vehicle_id, in_force = question.version.vehicle_id, question.in_force
    boot = boot_store.latest(c, vehicle_id, as_of)
    if in_force is None or in_force.in_force_from is None or boot is None:
        return
    if boot.calibration_id == in_force.calibration_id:
        alerting.clear(c, services, vehicle_id, "not_loaded", as_of, f"number {in_force.number} was loaded")
    elif as_of - in_force.in_force_from > judgement.LOAD_WITHIN:
        number = boot.statement.calibration_number
        if number is None and boot.calibration_id is not None:
            number = calibration_store.by_id(c, boot.calibration_id).number
        content = judgement.not_loaded(question.version.statement.name, number, in_force)
        alerting.raise_or_update(c, services, vehicle_id, content, as_of)


def _still_ours(c: Connection, services: Services, holder: Holder | None) -> None:
    if holder is not None and not leases.holds(c, holder.name, holder.holder, holder.fence, services.now()):
        raise LeaseLost("another process took the pass over")


def vehicles_to_look_at(c: Connection, vehicle_ids: Sequence[str] | None) -> list[str]:
    """The vehicles of a pass: those named, or all."""
    known = [version.vehicle_id for version in vehicle_store.all_current(c)]
    if vehicle_ids is None:
        return known
    for vehicle_id in vehicle_ids:
        vehicle_store.current(c, vehicle_id)
    return list(vehicle_ids)
