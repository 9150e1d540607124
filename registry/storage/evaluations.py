"""Evaluations: what each scheduled look at a vehicle's recent runs found."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Row, func, insert, select

from registry.domain.evaluation import Evaluation, EvaluationResult, QuantityFinding
from registry.domain.tolerance import QUANTITIES
from registry.domain.vehicle import Parameters
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import evaluations

_NEWEST_FIRST = (evaluations.c.as_of.desc(), evaluations.c.sequence.desc())


def add(c: Connection, evaluation: Evaluation) -> None:
    """Record an evaluation."""
    c.execute(insert(evaluations), _values(evaluation))


def latest(c: Connection, vehicle_id: str, until: datetime | None = None) -> Evaluation | None:
    """A vehicle's evaluation of the latest ``as_of``, or of the latest one up to ``until``."""
    statement = select(evaluations).where(evaluations.c.vehicle_id == vehicle_id)
    if until is not None:
        statement = statement.where(evaluations.c.as_of <= until)
    row = c.execute(statement.order_by(*_NEWEST_FIRST).limit(1)).first()
    return None if row is None else _evaluation(row)


def latest_all(c: Connection) -> dict[str, Evaluation]:
    """The evaluation of the latest ``as_of`` of every vehicle that has one."""
    return {vehicle_id: newest[0] for vehicle_id, newest in recent_all(c, 1).items()}


def recent_all(c: Connection, each: int) -> dict[str, list[Evaluation]]:
    """The last ``each`` evaluations of every vehicle that has one, newest first, in one query."""
    place = func.row_number().over(partition_by=evaluations.c.vehicle_id, order_by=_NEWEST_FIRST).label("place")
    ranked = select(evaluations.c.sequence, place).subquery()
    statement = select(evaluations).join(ranked, ranked.c.sequence == evaluations.c.sequence)
    recent: dict[str, list[Evaluation]] = {}
    for row in c.execute(statement.where(ranked.c.place <= each).order_by(evaluations.c.vehicle_id, ranked.c.place)):
        recent.setdefault(row.vehicle_id, []).append(_evaluation(row))
    return recent


def page(c: Connection, vehicle_id: str, limit: int, after: str | None) -> Page[Evaluation]:
    """A vehicle's evaluations, newest first."""
    statement = select(evaluations).where(evaluations.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [evaluations.c.as_of, evaluations.c.sequence], _evaluations, limit, after)


def history(c: Connection, vehicle_id: str) -> list[Evaluation]:
    """All evaluations of a vehicle, oldest first."""
    statement = select(evaluations).where(evaluations.c.vehicle_id == vehicle_id)
    return _evaluations(c.execute(statement.order_by(evaluations.c.as_of, evaluations.c.sequence)).all())


def _evaluations(rows: Sequence[Row[Any]]) -> list[Evaluation]:
    return [_evaluation(row) for row in rows]


def _values(evaluation: Evaluation) -> dict[str, Any]:
    result = evaluation.result
    values: dict[str, Any] = {
        "evaluation_id": evaluation.evaluation_id,
        "vehicle_id": evaluation.vehicle_id,
        "as_of": evaluation.as_of,
        "recorded_at": evaluation.recorded_at,
        "against": result.against,
        "runs_used": result.runs_used,
        "first_run_at": result.first_run_at,
        "last_run_at": result.last_run_at,
        "coverage_factor": result.coverage_factor,
        "finding": result.finding,
        "message": result.message,
        "proposed_calibration_id": evaluation.proposed_calibration_id,
        "inputs": evaluation.inputs,
    }
    for name, quantity in zip(QUANTITIES, result.quantities(), strict=True):
        values[f"{name}_deviation"] = quantity.deviation
        values[f"{name}_u"] = quantity.u
        values[f"{name}_observed"] = bool(quantity.observed)
        values[f"{name}_probability_beyond"] = quantity.probability_beyond
    if result.fitted is not None:
        names = ("fitted_left_m_per_tick", "fitted_right_m_per_tick", "fitted_width_m")
        values |= dict(zip(names, result.fitted.as_tuple(), strict=True))
    if result.fitted_u_relative is not None:
        values |= dict(
            zip(("fitted_u_left", "fitted_u_right", "fitted_u_width"), result.fitted_u_relative, strict=True)
        )
    return values


def _evaluation(row: Row[Any]) -> Evaluation:
    fitted_u = (row.fitted_u_left, row.fitted_u_right, row.fitted_u_width)
    tick_factor, side_ratio, width = (_quantity(row, name) for name in QUANTITIES)
    result = EvaluationResult(
        against=row.against,
        runs_used=row.runs_used,
        first_run_at=row.first_run_at,
        last_run_at=row.last_run_at,
        tick_factor=tick_factor,
        side_ratio=side_ratio,
        width=width,
        fitted=None
        if row.fitted_width_m is None
        else Parameters(row.fitted_left_m_per_tick, row.fitted_right_m_per_tick, row.fitted_width_m),
        fitted_u_relative=None if row.fitted_u_width is None else fitted_u,
        coverage_factor=row.coverage_factor,
        finding=row.finding,
        message=row.message,
    )
    return Evaluation(
        evaluation_id=row.evaluation_id,
        vehicle_id=row.vehicle_id,
        as_of=row.as_of,
        recorded_at=row.recorded_at,
        result=result,
        proposed_calibration_id=row.proposed_calibration_id,
        inputs=row.inputs,
    )


def _quantity(row: Row[Any], name: str) -> QuantityFinding:
    columns = row._mapping
    return QuantityFinding(
        deviation=columns[f"{name}_deviation"],
        u=columns[f"{name}_u"],
        observed=columns[f"{name}_observed"],
        probability_beyond=columns[f"{name}_probability_beyond"],
    )
