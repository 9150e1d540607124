"""From a fit to the content of a calibration, and what the one in force may lend to it."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime

import numpy as np

from registry.domain.calibration import Calibration, CalibrationResult, CalibrationRun, Kind, Matrix3, Observed
from registry.domain.run import Run
from registry.numerics.arrays import Bool, Float
from registry.numerics.fit import METHOD_VERSION, Fit, Hold, fit
from registry.numerics.observability import quantity_covariance, to_quantities
from registry.numerics.stacks import CountsStack, MapStack
from registry.procedures.boot_sheets import awaiting
from registry.procedures.evidence import Evidence, misclosure_of, parameter_array, parameters_of
from registry.storage import calibrations as calibration_store
from registry.storage import in_force as in_force_store
from registry.storage.engine import Connection


def current_calibration(c: Connection, vehicle_id: str, at: datetime) -> Calibration | None:
    """The calibration in force at a time, if any."""
    held = in_force_store.in_force(c, vehicle_id, at)
    if held is None or held.calibration_id is None:
        return None
    return calibration_store.by_id(c, held.calibration_id)


def supplier_of(c: Connection, calibration: Calibration | None, at: datetime) -> Calibration | None:
    """The calibration in force, if it may lend a quantity that the runs leave open.

    A provisional one may not, nor one that reinstates a provisional one, nor one from before work that it knows nothing
    of.
    """
    if calibration is None:
        return None
    reinstates = calibration.reinstates
    origin = calibration if reinstates is None else calibration_store.by_id(c, reinstates)
    if origin.result.kind == "provisional" or awaiting(c, calibration.vehicle_id, at) is not None:
        return None
    return calibration


def hold_from(calibration: Calibration, which: Bool) -> Hold:
    """Quantities of a calibration as supplied values for a fit."""
    array = parameter_array(calibration.result.parameters)
    covariance = quantity_covariance(np.array(calibration.result.covariance_relative), array)
    return Hold(which, to_quantities(array), covariance)


def held_fit(
    c: Connection, evidence: Evidence, stack: MapStack | CountsStack, answer: Fit, hold: Hold
) -> tuple[MapStack | CountsStack, Fit]:
    """Fit again with some quantities held, by the counts where the held values lie outside the maps."""
    held = fit(stack, evidence.closures, answer.parameters, hold)
    if held.status == "outside maps":
        stack = evidence.counts_stack(c)
        held = fit(stack, evidence.closures, answer.parameters, hold)
    return stack, held


def calibration_result(
    kind: Kind,
    answer: Fit,
    seen: Bool,
    supplier: Calibration | None,
    runs: tuple[CalibrationRun, ...],
    note: str | None,
) -> CalibrationResult:
    """A fit as the content of a calibration; what is not seen comes from the supplier."""
    tick_factor, side_ratio, width = (bool(value) for value in seen)
    parameters, covariance = _with_supplied(answer, seen, supplier)
    return CalibrationResult(
        kind=kind,
        parameters=parameters_of(parameters),
        covariance_relative=matrix(covariance),
        observed=Observed(tick_factor=tick_factor, side_ratio=side_ratio, width=width),
        runs=runs,
        birge_ratio=answer.birge_ratio,
        coverage_factor=answer.coverage_factor,
        random_error_m_per_sqrt_m=float(np.sqrt(answer.rolling_noise_m)),
        method_version=METHOD_VERSION,
        note=note,
    )


def _with_supplied(answer: Fit, seen: Bool, supplier: Calibration | None) -> tuple[Float, Float]:
    """Parameters and relative covariance, copied to the last digit where they are supplied.

    Why this form: the fit holds the logarithm of a supplied quantity, and a copy that comes back through an exponential
    is no longer the same number.
    """
    parameters, covariance = answer.parameters.copy(), answer.covariance_relative.copy()
    if supplier is None:
        return parameters, covariance
    own, own_covariance = parameter_array(supplier.result.parameters), np.array(supplier.result.covariance_relative)
    sides, width = not (seen[0] or seen[1]), not seen[2]
    if sides and width:
        return own, own_covariance
    if sides:
        parameters[:2], covariance[:2, :2] = own[:2], own_covariance[:2, :2]
    if width:
        parameters[2], covariance[2, 2] = own[2], own_covariance[2, 2]
    return parameters, covariance


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
