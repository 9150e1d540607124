"""Rows of calibrations: how one is asked for, with how it stands, what it becomes here, and what is written of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy import Row, Select, func, select

from registry.domain.calibration import Calibration, CalibrationResult, CalibrationRun, Observed
from registry.domain.run import Misclosure
from registry.domain.vehicle import Parameters
from registry.storage.engine import Connection
from registry.storage.runs import misclosure_of, misclosure_values
from registry.storage.tables import calibration_runs, calibration_standings, calibrations
from registry.storage.tables import in_force as entries

_later = calibration_standings.alias("later")
#: Every calibration with its latest standing.
CALIBRATIONS: Select[Any] = (
    select(calibrations, calibration_standings.c.standing)
    .join(calibration_standings, calibration_standings.c.calibration_id == calibrations.c.calibration_id)
    .where(
        calibration_standings.c.sequence
        == select(func.max(_later.c.sequence))
        .where(_later.c.calibration_id == calibrations.c.calibration_id)
        .scalar_subquery()
    )
)
_NOT_MEASURED = Misclosure(None, None, None, None)


def build(c: Connection, rows: Sequence[Row[Any]]) -> list[Calibration]:
    """Calibrations with their runs and their times in force, three queries however many they are."""
    ids = [row.calibration_id for row in rows]
    if not ids:
        return []
    contributions: dict[str, list[CalibrationRun]] = {}
    behind = select(calibration_runs).where(calibration_runs.c.calibration_id.in_(ids))
    for row in c.execute(behind.order_by(calibration_runs.c.calibration_id, calibration_runs.c.position)):
        contributions.setdefault(row.calibration_id, []).append(_contribution(row))
    spans = _spans(c, {row.vehicle_id for row in rows})
    made = [_calibration(row, tuple(contributions.get(row.calibration_id, ()))) for row in rows]
    return [
        replace(one, in_force_from=spans[one.calibration_id][0], in_force_to=spans[one.calibration_id][1])
        if one.calibration_id in spans
        else one
        for one in made
    ]


def _spans(c: Connection, vehicle_ids: set[str]) -> dict[str, tuple[datetime, datetime | None]]:
    """From when to when each calibration of some vehicles was in force (the end is None while it is)."""
    statement = select(entries.c.vehicle_id, entries.c.calibration_id, entries.c.in_force_from)
    ordered = statement.where(entries.c.vehicle_id.in_(vehicle_ids)).order_by(entries.c.vehicle_id, entries.c.sequence)
    spans: dict[str, tuple[datetime, datetime | None]] = {}
    before: Any = None
    for row in c.execute(ordered):
        if before is not None and before.vehicle_id == row.vehicle_id and before.calibration_id is not None:
            spans[before.calibration_id] = (spans[before.calibration_id][0], row.in_force_from)
        if row.calibration_id is not None:
            spans[row.calibration_id] = (row.in_force_from, None)
        before = row
    return spans


def values(calibration: Calibration) -> dict[str, Any]:
    """The columns of a calibration; its standing is kept apart."""
    result = calibration.result
    return {
        "calibration_id": calibration.calibration_id,
        "vehicle_id": calibration.vehicle_id,
        "number": calibration.number,
        "kind": result.kind,
        "left_m_per_tick": result.parameters.left_m_per_tick,
        "right_m_per_tick": result.parameters.right_m_per_tick,
        "width_m": result.parameters.width_m,
        "covariance_relative": [[float(entry) for entry in row] for row in result.covariance_relative],
        "observed_tick_factor": bool(result.observed.tick_factor),
        "observed_side_ratio": bool(result.observed.side_ratio),
        "observed_width": bool(result.observed.width),
        "birge_ratio": result.birge_ratio,
        "coverage_factor": result.coverage_factor,
        "random_error_m_per_sqrt_m": result.random_error_m_per_sqrt_m,
        "method_version": result.method_version,
        "note": result.note,
        "based_on": calibration.based_on,
        "reinstates": calibration.reinstates,
        "recorded_at": calibration.recorded_at,
        "recorded_by": calibration.recorded_by,
    }


def run_values(calibration_id: str, position: int, run: CalibrationRun) -> dict[str, Any]:
    """The columns of what one run contributed."""
    left, right, width = run.influence
    return {
        "calibration_id": calibration_id,
        "position": position,
        "run_id": run.run_id,
        "weight": run.weight,
        **misclosure_values("before", run.before),
        **misclosure_values("after", run.after),
        "influence_left": left,
        "influence_right": right,
        "influence_width": width,
    }


def _contribution(row: Row[Any]) -> CalibrationRun:
    return CalibrationRun(
        run_id=row.run_id,
        weight=row.weight,
        before=misclosure_of(row, "before") or _NOT_MEASURED,
        after=misclosure_of(row, "after") or _NOT_MEASURED,
        influence=(row.influence_left, row.influence_right, row.influence_width),
    )


def _calibration(row: Row[Any], contributions: tuple[CalibrationRun, ...]) -> Calibration:
    first, second, third = (tuple(entries) for entries in row.covariance_relative)
    result = CalibrationResult(
        kind=row.kind,
        parameters=Parameters(row.left_m_per_tick, row.right_m_per_tick, row.width_m),
        covariance_relative=(first, second, third),
        observed=Observed(row.observed_tick_factor, row.observed_side_ratio, row.observed_width),
        runs=contributions,
        birge_ratio=row.birge_ratio,
        coverage_factor=row.coverage_factor,
        random_error_m_per_sqrt_m=row.random_error_m_per_sqrt_m,
        method_version=row.method_version,
        note=row.note,
    )
    return Calibration(
        calibration_id=row.calibration_id,
        vehicle_id=row.vehicle_id,
        number=row.number,
        result=result,
        standing=row.standing,
        based_on=row.based_on,
        in_force_from=None,
        in_force_to=None,
        recorded_at=row.recorded_at,
        recorded_by=row.recorded_by,
        reinstates=row.reinstates,
    )
