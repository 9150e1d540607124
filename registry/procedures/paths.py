"""Where a run went by different parameters, for the run's page."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.domain.calibration import Calibration
from registry.domain.run import Misclosure, Run
from registry.domain.vehicle import Parameters
from registry.numerics.arrays import Float
from registry.numerics.closure import component_jacobian, misclosure, misclosure_covariance
from registry.numerics.fit import DEFAULT_ROLLING_NOISE_M
from registry.numerics.kinematics import at_reference_point, path
from registry.numerics.stacks import CountsStack
from registry.procedures.calibration_results import current_calibration
from registry.procedures.evidence import Evidence, misclosure_of, parameter_array
from registry.services import Services
from registry.storage import calibrations as calibration_store
from registry.storage import evaluations as evaluation_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

#: A drawing needs no more points than this; the ends are kept.
_DRAWN_POINTS = 1500


@dataclass(frozen=True)
class DrivenPath:
    """The path of the reference point by one parameter set.

    Attributes
    ----------
    label : str
        Whose parameters these are, in words.
    poses : (n, 3) float
        x, y in metres and heading in radians, thinned for drawing.
    misclosure : Misclosure
        The closing error by these parameters.
    """

    label: str
    parameters: Parameters
    calibration: Calibration | None
    poses: Float
    misclosure: Misclosure


@dataclass(frozen=True)
class RunPaths:
    """A run as driven, by up to three parameter sets, with the mark where it truly ended.

    Attributes
    ----------
    mark_m : (2,) float or None
        Where the run ended as read, when both x and y were measured.
    mark_covariance_m2 : (2, 2) float or None
        Of closure and prediction together at the mark: what a closing error is to be held against.
    """

    run: Run
    paths: tuple[DrivenPath, ...]
    mark_m: Float | None
    mark_covariance_m2: Float | None


def run_paths(services: Services, run_id: str) -> RunPaths:
    """The run by what was in force when it was driven, by what is in force now, and by the newest fit.

    Raises
    ------
    NotFound
        No such run.
    """
    with services.read() as c:
        run = run_store.by_id(c, run_id)
        evidence = Evidence(c, [run])
        ticks = evidence.ticks(c)[0]
        sets = _parameter_sets(c, run, services)
    stack = CountsStack([ticks], evidence.levers_m)
    drawn: list[DrivenPath] = []
    for label, parameters, calibration in sets:
        array = parameter_array(parameters)
        row = misclosure(evidence.closures, stack.poses(array))[0]
        poses = at_reference_point(path(*ticks, array), evidence.levers_m[0])
        drawn.append(DrivenPath(label, parameters, calibration, _thinned(poses), misclosure_of(row, run.closure)))
    mark = covariance = None
    if run.closure.x_m is not None and run.closure.y_m is not None:
        mark = np.array([run.closure.x_m, run.closure.y_m])
        calibration = next((item.calibration for item in drawn if item.calibration is not None), None)
        covariance = _covariance(stack, evidence, drawn[0].parameters, calibration)
    return RunPaths(run, tuple(drawn), mark, covariance)


def _parameter_sets(c: Connection, run: Run, services: Services) -> list[tuple[str, Parameters, Calibration | None]]:
    then = current_calibration(c, run.vehicle_id, run.started_at)
    now = current_calibration(c, run.vehicle_id, services.now())
    sets: list[tuple[str, Parameters, Calibration | None]] = []
    if then is not None:
        sets.append((f"in force when driven (number {then.number})", then.result.parameters, then))
    if now is not None and (then is None or now.calibration_id != then.calibration_id):
        sets.append((f"in force now (number {now.number})", now.result.parameters, now))
    if not sets:
        version = vehicle_store.by_version(c, run.vehicle_id, run.vehicle_version)
        sets.append(("nominal values", version.statement.nominal, None))
    newest = evaluation_store.latest(c, run.vehicle_id)
    if newest is not None and newest.proposed_calibration_id is not None:
        proposal = calibration_store.by_id(c, newest.proposed_calibration_id)
        if proposal.standing == "proposed":
            sets.append((f"newest fit (proposed, number {proposal.number})", proposal.result.parameters, proposal))
    return sets


def _covariance(
    stack: CountsStack, evidence: Evidence, parameters: Parameters, calibration: Calibration | None
) -> Float:
    noise = None if calibration is None else calibration.result.random_error_m_per_sqrt_m
    rolling = DEFAULT_ROLLING_NOISE_M if noise is None else noise**2
    prediction = stack.predict(parameter_array(parameters))
    component = component_jacobian(prediction.pose)
    covariance = misclosure_covariance(evidence.closures, rolling * prediction.noise, component)
    return np.asarray(covariance[0, :2, :2])


def _thinned(poses: Float) -> Float:
    step = max(1, poses.shape[0] // _DRAWN_POINTS)
    kept = np.unique(np.r_[np.arange(0, poses.shape[0], step), poses.shape[0] - 1])
    return np.asarray(poses[kept])
