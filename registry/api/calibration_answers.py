"""How a calibration is written."""

from __future__ import annotations

import numpy as np

from registry.api import bodies, fields
from registry.api.bodies import Answer, Described, ValueWithU
from registry.domain.calibration import Calibration, CalibrationResult, CalibrationRun, Kind, Standing
from registry.numerics.observability import quantity_covariance
from registry.procedures.adoption import Withdrawal


class ObservedAnswer(Answer):
    """Which quantities the runs determined; false was copied from the calibration in force, or entered."""

    tick_factor: bool
    side_ratio: bool
    width: bool


class InfluenceAnswer(Answer):
    """How each value would change, in percent, if this run were left out."""

    left_percent: float
    right_percent: float
    width_percent: float


class CalibrationRunAnswer(Answer):
    """What one run contributed: misclosure with the parameters before and after."""

    run_id: str
    weight: float
    before: bodies.MisclosureAnswer
    after: bodies.MisclosureAnswer
    influence: InfluenceAnswer


class CalibrationAnswer(Answer):
    """A calibration on the record. `covariance_relative` is of (left, right, width), each relative to its value."""

    calibration_id: str
    vehicle_id: str
    number: int
    kind: Kind
    standing: Standing
    left_mm_per_tick: ValueWithU
    right_mm_per_tick: ValueWithU
    width_mm: ValueWithU
    tick_factor_mm_per_tick: ValueWithU
    side_ratio_percent: ValueWithU
    covariance_relative: list[list[float]]
    observed: ObservedAnswer
    runs_used: int
    runs: list[CalibrationRunAnswer]
    birge_ratio: float | None
    coverage_factor: float
    random_error_mm_per_sqrt_m: float | None
    method_version: str
    based_on: str | None
    reinstates: str | None
    in_force_from: fields.Time | None
    in_force_to: fields.Time | None
    recorded_at: fields.Time
    recorded_by: str
    note: str | None


class WithdrawalAnswer(Answer):
    """What was taken back, what holds next (null: nothing), and which vehicles had loaded the withdrawn one."""

    calibration: CalibrationAnswer
    in_force: CalibrationAnswer | None
    loaded_by: list[str]


def described(calibration: Calibration) -> Described:
    """A calibration as the doors write it."""
    result = calibration.result
    return {
        "calibration_id": calibration.calibration_id,
        "vehicle_id": calibration.vehicle_id,
        "number": calibration.number,
        "kind": result.kind,
        "standing": calibration.standing,
        **_values(result),
        "covariance_relative": [[fields.rounded(entry) for entry in row] for row in result.covariance_relative],
        "observed": vars(result.observed),
        "runs_used": len(result.runs),
        "runs": [_run(run) for run in result.runs],
        "birge_ratio": result.birge_ratio,
        "coverage_factor": result.coverage_factor,
        "random_error_mm_per_sqrt_m": fields.mm(result.random_error_m_per_sqrt_m),
        "method_version": result.method_version,
        "based_on": calibration.based_on,
        "reinstates": calibration.reinstates,
        "in_force_from": fields.instant(calibration.in_force_from),
        "in_force_to": fields.instant(calibration.in_force_to),
        "recorded_at": fields.instant(calibration.recorded_at),
        "recorded_by": calibration.recorded_by,
        "note": result.note,
    }


def withdrawn(done: Withdrawal) -> Described:
    """A withdrawal as the doors write it."""
    return {
        "calibration": described(done.calibration),
        "in_force": None if done.in_force is None else described(done.in_force),
        "loaded_by": list(done.loaded_by),
    }


def _values(result: CalibrationResult) -> Described:
    """The five quantities with their standard uncertainties, in door units."""
    parameters = result.parameters
    relative = np.array(result.covariance_relative)
    u_left, u_right, u_width = (float(u) for u in np.sqrt(np.diag(relative)))
    watched = quantity_covariance(relative, np.array(parameters.as_tuple()))
    u_tick_factor, u_side_ratio, _ = (float(u) for u in np.sqrt(np.diag(watched)))
    left_mm, right_mm, width_mm = (value * 1e3 for value in parameters.as_tuple())
    tick_factor_mm = parameters.tick_factor_m_per_tick * 1e3
    return {
        "left_mm_per_tick": bodies.value_with_u(left_mm, left_mm * u_left),
        "right_mm_per_tick": bodies.value_with_u(right_mm, right_mm * u_right),
        "width_mm": bodies.value_with_u(width_mm, width_mm * u_width),
        "tick_factor_mm_per_tick": bodies.value_with_u(tick_factor_mm, tick_factor_mm * u_tick_factor),
        "side_ratio_percent": bodies.value_with_u(parameters.side_ratio * 1e2, u_side_ratio * 1e2),
    }


def _run(run: CalibrationRun) -> Described:
    left, right, width = run.influence
    return {
        "run_id": run.run_id,
        "weight": fields.rounded(run.weight),
        "before": bodies.misclosure(run.before),
        "after": bodies.misclosure(run.after),
        "influence": {
            "left_percent": fields.percent(left),
            "right_percent": fields.percent(right),
            "width_percent": fields.percent(width),
        },
    }
