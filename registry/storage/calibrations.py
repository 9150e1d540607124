"""Calibrations as they were recorded, and the history of their standing."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy import Row, Select, func, insert, select

from registry.domain.calibration import Calibration, CalibrationResult, CalibrationRun, Kind, Observed, Standing
from registry.domain.run import Misclosure
from registry.domain.vehicle import Parameters
from registry.errors import NotFound
from registry.storage.engine import Connection
from registry.storage.in_force import all_in_force, in_force, in_force_history, put_in_force
from registry.storage.pages import Page, page_of
from registry.storage.runs import misclosure_of, misclosure_values
from registry.storage.tables import calibration_runs, calibration_standings, calibrations, runs
from registry.storage.tables import in_force as entries

__all__ = [
    "add", "add_standing", "all_for", "all_in_force", "by_id", "by_number", "find_by_number", "first_run_at",
    "in_force", "in_force_history", "open_proposals", "page", "put_in_force", "withdrawn_numbers",
]  # fmt: skip

_later = calibration_standings.alias("later")
_CALIBRATIONS: Select[Any] = (
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


def add(
    c: Connection,
    calibration_id: str,
    vehicle_id: str,
    result: CalibrationResult,
    based_on: str | None,
    recorded_at: datetime,
    by: str,
    *,
    reinstates: str | None = None,
) -> Calibration:
    """Record a calibration as proposed, under the vehicle's next number.

    Parameters
    ----------
    based_on
        The calibration in force when it was proposed.
    reinstates
        For kind ``reinstated``: the calibration whose numbers it carries, the first of them in a chain.
    """
    of_vehicle = calibrations.c.vehicle_id == vehicle_id
    number = (c.scalar(select(func.max(calibrations.c.number)).where(of_vehicle)) or 0) + 1
    made = Calibration(
        calibration_id=calibration_id,
        vehicle_id=vehicle_id,
        number=number,
        result=result,
        standing="proposed",
        based_on=based_on,
        in_force_from=None,
        in_force_to=None,
        recorded_at=recorded_at,
        recorded_by=by,
        reinstates=reinstates,
    )
    c.execute(insert(calibrations), _values(made))
    if result.runs:
        c.execute(insert(calibration_runs), [_run_values(calibration_id, i, run) for i, run in enumerate(result.runs)])
    add_standing(c, calibration_id, "proposed", recorded_at, by, result.note)
    return made


def add_standing(
    c: Connection, calibration_id: str, standing: Standing, at: datetime, by: str, reason: str | None
) -> None:
    """Record how a calibration stands from now on."""
    c.execute(
        insert(calibration_standings).values(
            calibration_id=calibration_id, standing=standing, at=at, by=by, reason=reason
        )
    )


def by_id(c: Connection, calibration_id: str) -> Calibration:
    """One calibration.

    Raises
    ------
    NotFound
        No such calibration.
    """
    found = _build(c, c.execute(_CALIBRATIONS.where(calibrations.c.calibration_id == calibration_id)).all())
    if not found:
        raise NotFound(f"there is no calibration {calibration_id!r}")
    return found[0]


def parameters_by_id(c: Connection, calibration_id: str) -> Parameters:
    """The parameters of one calibration alone, in one query: what every run that is taken in asks for.

    Raises
    ------
    NotFound
        No such calibration.
    """
    wanted = select(calibrations.c.left_m_per_tick, calibrations.c.right_m_per_tick, calibrations.c.width_m)
    row = c.execute(wanted.where(calibrations.c.calibration_id == calibration_id)).one_or_none()
    if row is None:
        raise NotFound(f"there is no calibration {calibration_id!r}")
    return Parameters(row.left_m_per_tick, row.right_m_per_tick, row.width_m)


def find_by_number(c: Connection, vehicle_id: str, number: int) -> Calibration | None:
    """One calibration of a vehicle by its number, if there is one."""
    wanted = _CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id, calibrations.c.number == number)
    found = _build(c, c.execute(wanted).all())
    return found[0] if found else None


def by_number(c: Connection, vehicle_id: str, number: int) -> Calibration:
    """One calibration of a vehicle by its number.

    Raises
    ------
    NotFound
        The vehicle has no calibration of that number.
    """
    found = find_by_number(c, vehicle_id, number)
    if found is None:
        raise NotFound(f"vehicle {vehicle_id!r} has no calibration number {number}")
    return found


def numbers_of(c: Connection, calibration_ids: Iterable[str]) -> dict[str, int]:
    """The number of each of some calibrations, by identity."""
    numbered = select(calibrations.c.calibration_id, calibrations.c.number)
    rows = c.execute(numbered.where(calibrations.c.calibration_id.in_(list(calibration_ids))))
    return {row.calibration_id: row.number for row in rows}


def page(c: Connection, vehicle_id: str, limit: int, after: str | None) -> Page[Calibration]:
    """A vehicle's calibrations, the one proposed last first."""
    statement = _CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [calibrations.c.number], lambda rows: _build(c, rows), limit, after)


def all_for(c: Connection, vehicle_id: str) -> list[Calibration]:
    """All calibrations of a vehicle, by number."""
    statement = _CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id).order_by(calibrations.c.number)
    return _build(c, c.execute(statement).all())


def open_proposals(c: Connection, vehicle_id: str, kind: Kind | None = None) -> list[Calibration]:
    """A vehicle's calibrations that are still proposed, by number."""
    statement = _CALIBRATIONS.where(
        calibrations.c.vehicle_id == vehicle_id, calibration_standings.c.standing == "proposed"
    )
    if kind is not None:
        statement = statement.where(calibrations.c.kind == kind)
    return _build(c, c.execute(statement.order_by(calibrations.c.number)).all())


def all_open_proposals(c: Connection) -> dict[str, list[Calibration]]:
    """The calibrations of every vehicle that are still proposed, by number."""
    statement = _CALIBRATIONS.where(calibration_standings.c.standing == "proposed").order_by(calibrations.c.number)
    proposed: dict[str, list[Calibration]] = {}
    for one in _build(c, c.execute(statement).all()):
        proposed.setdefault(one.vehicle_id, []).append(one)
    return proposed


def withdrawn_numbers(c: Connection, vehicle_id: str, until: datetime | None = None) -> tuple[int, ...]:
    """Numbers of a vehicle's calibrations that are withdrawn, or had been by ``until``, ascending."""
    standings = calibration_standings
    statement = (
        select(calibrations.c.number)
        .join(standings, standings.c.calibration_id == calibrations.c.calibration_id)
        .where(calibrations.c.vehicle_id == vehicle_id, standings.c.standing == "withdrawn")
    )
    if until is not None:
        statement = statement.where(standings.c.at <= until)
    return tuple(c.scalars(statement.order_by(calibrations.c.number)))


def first_run_at(c: Connection, calibration_id: str) -> datetime | None:
    """When the earliest run behind a calibration started; None for one that rests on no runs."""
    started_at: datetime | None = c.scalar(
        select(func.min(runs.c.started_at, type_=runs.c.started_at.type))
        .join(calibration_runs, calibration_runs.c.run_id == runs.c.run_id)
        .where(calibration_runs.c.calibration_id == calibration_id)
    )
    return started_at


def last_run_at(c: Connection, calibration_id: str) -> datetime | None:
    """When the latest run behind a calibration started; None for one that rests on no runs."""
    started_at: datetime | None = c.scalar(
        select(func.max(runs.c.started_at, type_=runs.c.started_at.type))
        .join(calibration_runs, calibration_runs.c.run_id == runs.c.run_id)
        .where(calibration_runs.c.calibration_id == calibration_id)
    )
    return started_at


def _build(c: Connection, rows: Sequence[Row[Any]]) -> list[Calibration]:
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


def _values(calibration: Calibration) -> dict[str, Any]:
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


def _run_values(calibration_id: str, position: int, run: CalibrationRun) -> dict[str, Any]:
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
