"""What the recent runs of a vehicle say against its calibration in force."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np

from registry.domain import judgement
from registry.domain.calibration import Calibration, CalibrationResult
from registry.domain.evaluation import EvaluationResult, QuantityFinding
from registry.domain.run import Run
from registry.domain.vehicle import VehicleVersion
from registry.numerics.arrays import Bool, Float
from registry.numerics.closure_map import ClosureMap
from registry.numerics.conformity import ACT_AT, probability_beyond
from registry.numerics.fit import DEFAULT_ROLLING_NOISE_M, Fit, fit, misclosures
from registry.numerics.observability import (
    deviation,
    observed,
    quantity_covariance,
    relative_from_quantities,
    to_parameters,
    to_quantities,
)
from registry.numerics.recent import latest_state
from registry.numerics.stacks import CountsStack, MapStack
from registry.numerics.start_values import find_start
from registry.procedures.calibration_results import (
    calibration_result,
    contributions,
    held_fit,
    hold_from,
    supplier_of,
)
from registry.procedures.evidence import Evidence, parameter_array, parameters_of, refold
from registry.storage.engine import Connection

_LEAST_DEGREES = 1.0
#: The other runs agree with one when they are off by this many of their own standard uncertainties.
_CLEARLY = 2.0
#: Runs that leave every quantity looser than this (relative) do not stand for a state of their own.
_TELLS_SOMETHING = 0.01
#: Half of the runs beyond this normal score: the fit hangs at a wrong whole turn, or the counting changed.
_LOST_SCORE = 3.5


@dataclass(frozen=True)
class _Fitted:
    """Runs and what a fit says of them; ``new_maps`` where the old ones did not reach."""

    evidence: Evidence
    stack: MapStack | CountsStack
    answer: Fit
    new_maps: dict[str, ClosureMap]


@dataclass(frozen=True)
class Verdict:
    """What the runs say, with everything that must be written.

    Attributes
    ----------
    confirmed : (bool, bool, bool)
        Whether each quantity would stay beyond its tolerance, and clearly off, without any single run.
    proposal : CalibrationResult or None
        The fit as a calibration, when it is beyond tolerance and nothing must be made up for it.
    new_maps : dict of str to ClosureMap
        By run, where the stored maps do not reach.
    """

    result: EvaluationResult
    confirmed: tuple[bool, bool, bool]
    proposal: CalibrationResult | None
    new_maps: dict[str, ClosureMap]


def judge(
    c: Connection, runs: tuple[Run, ...], calibration: Calibration, version: VehicleVersion, at: datetime
) -> Verdict:
    """Fit runs (in the order driven, at least one) and hold the outcome against a calibration and the tolerances.

    Parameters
    ----------
    at
        When the calibration is in force: what it may lend to a proposal depends on the work done until then.
    """
    fitted = _fit(c, runs, calibration)
    quantities, confirmed = _judge(fitted.answer, calibration, version)
    result = _result(fitted, calibration, quantities, confirmed)
    proposal = None
    if result.finding == "beyond":
        proposal = _proposal(c, fitted, np.array([item.observed for item in quantities]), calibration, at)
    return Verdict(result, confirmed, proposal, fitted.new_maps)


def _fit(c: Connection, runs: tuple[Run, ...], calibration: Calibration) -> _Fitted:
    """Fit the runs that belong to the vehicle's latest state.

    After a change the runs before it only hide it, and under wear the mean of a window lags: the window is narrowed to
    its latest state until its runs belong together, as long as they tell anything.
    """
    reference = parameter_array(calibration.result.parameters)
    noise = calibration.result.random_error_m_per_sqrt_m
    guess = DEFAULT_ROLLING_NOISE_M if noise is None else noise**2
    fitted = _fit_all(c, Evidence(c, runs), reference, guess)
    while begin := latest_state(fitted.stack, fitted.evidence.closures, fitted.answer):
        latest = _fit_all(c, fitted.evidence.since(begin), reference, guess)
        if latest.answer.status != "converged" or not bool(np.any(latest.answer.u_quantities < _TELLS_SOMETHING)):
            break
        fitted = replace(latest, new_maps=fitted.new_maps | latest.new_maps)
    return fitted


def _fit_all(c: Connection, evidence: Evidence, reference: Float, guess: float) -> _Fitted:
    """Fit all the runs; where their maps do not reach, integrate the counts and make new maps round the outcome."""
    stack: MapStack | CountsStack | None = evidence.map_stack(c)
    if stack is not None:
        answer = fit(stack, evidence.closures, reference, rolling_guess_m=guess)
        if answer.status != "outside maps":
            return _Fitted(evidence, stack, answer, {})
    stack = evidence.counts_stack(c)
    answer = fit(stack, evidence.closures, reference, rolling_guess_m=guess)
    if float(np.median(answer.normalised)) > _LOST_SCORE:
        start = find_start(stack.counts, evidence.levers_m, evidence.closures, reference)
        answer = fit(stack, evidence.closures, start, rolling_guess_m=guess)
    return _Fitted(evidence, stack, answer, refold(c, evidence, answer.parameters))


def _seen(answer: Fit, version: VehicleVersion) -> Bool:
    """Which quantities (3,) the runs behind a fit determine."""
    tolerance = np.array(version.statement.tolerance.as_tuple())
    settled = answer.status == "converged" and answer.degrees_of_freedom >= _LEAST_DEGREES
    return observed(answer.u_quantities, tolerance) & settled


def _judge(
    answer: Fit, calibration: Calibration, version: VehicleVersion
) -> tuple[tuple[QuantityFinding, QuantityFinding, QuantityFinding], tuple[bool, bool, bool]]:
    """Deviation of each observed quantity, and whether all but any single run say of it that it is beyond."""
    reference = parameter_array(calibration.result.parameters)
    tolerance = np.array(version.statement.tolerance.as_tuple())
    away = deviation(answer.parameters, reference)
    seen = _seen(answer, version)
    own = np.diag(quantity_covariance(np.array(calibration.result.covariance_relative), reference))
    u = np.sqrt(answer.u_quantities**2 + own)
    agreed = _agreed(
        np.sign(away) * _without_each_run(answer, reference), np.sqrt(answer.u_without**2 + own), tolerance
    )
    degrees = max(1.0, answer.degrees_of_freedom)
    findings: list[QuantityFinding] = []
    for index in range(3):
        if not seen[index]:
            findings.append(QuantityFinding(None, None, observed=False, probability_beyond=None))
            continue
        limit, sigma = float(tolerance[index]), float(u[index])
        probability = probability_beyond(float(away[index]), sigma, -limit, limit, degrees)
        findings.append(QuantityFinding(float(away[index]), sigma, observed=True, probability_beyond=probability))
    confirmed = tuple(bool(value) for value in agreed & seen)
    return (findings[0], findings[1], findings[2]), (confirmed[0], confirmed[1], confirmed[2])


def _agreed(without: Float, u: Float, tolerance: Float) -> Bool:
    """Whether each quantity (3,) stays beyond its tolerance, and clearly off, without any single run.

    Parameters
    ----------
    without, u : (n, 3) float
        Deviations without each run, positive on the side where all runs together see it, and their uncertainties.

    Notes
    -----
    Both are asked: what the other runs do not determine may lie anywhere without it, far beyond a tolerance too.
    """
    if without.shape[0] < 2:
        return np.zeros(3, dtype=np.bool_)
    return np.asarray(np.all((without >= tolerance) & (without >= _CLEARLY * u), axis=0))


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


def _proposal(
    c: Connection, fitted: _Fitted, seen: Bool, calibration: Calibration, at: datetime
) -> CalibrationResult | None:
    """The fit as a calibration; what the runs do not tell is copied from the one in force, where that may lend it."""
    evidence, stack, answer = fitted.evidence, fitted.stack, fitted.answer
    supplier = None
    if not seen.all():
        supplier = supplier_of(c, calibration, at)
        if supplier is None:
            return None
        stack, answer = held_fit(c, evidence, stack, answer, hold_from(supplier, ~seen))
        if answer.status != "converged":
            return None
    reference = parameter_array(calibration.result.parameters)
    if not bool(stack.inside(reference).all()):
        stack = evidence.counts_stack(c)
    before = misclosures(stack, evidence.closures, reference)
    note = f"proposed by the evaluation of {len(evidence.runs)} runs"
    given = contributions(evidence.runs, answer, before)
    return calibration_result("evaluation", answer, seen, supplier, given, note)
