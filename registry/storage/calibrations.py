"""Calibrations as they were recorded, and the history of their standing."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import datetime

from sqlalchemy import func, insert, select

from registry.domain.calibration import Calibration, CalibrationResult, Kind, Standing
from registry.domain.vehicle import Parameters
from registry.errors import NotFound
from registry.storage.calibration_rows import CALIBRATIONS, build, run_values, values
from registry.storage.engine import Connection
from registry.storage.in_force import all_in_force, in_force, in_force_history, put_in_force
from registry.storage.pages import Page, page_of
from registry.storage.tables import calibration_runs, calibration_standings, calibrations, runs

__all__ = [
    "add", "add_standing", "all_for", "all_in_force", "by_id", "by_number", "find_by_number", "first_run_at",
    "in_force", "in_force_history", "open_proposals", "page", "put_in_force", "withdrawn_at",
    "withdrawn_numbers",
]  # fmt: skip


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
    c.execute(insert(calibrations), values(made))
    if result.runs:
        c.execute(insert(calibration_runs), [run_values(calibration_id, i, run) for i, run in enumerate(result.runs)])
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
    found = build(c, c.execute(CALIBRATIONS.where(calibrations.c.calibration_id == calibration_id)).all())
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
    wanted = CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id, calibrations.c.number == number)
    found = build(c, c.execute(wanted).all())
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
    statement = CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [calibrations.c.number], lambda rows: build(c, rows), limit, after)


def all_for(c: Connection, vehicle_id: str) -> list[Calibration]:
    """All calibrations of a vehicle, by number."""
    statement = CALIBRATIONS.where(calibrations.c.vehicle_id == vehicle_id).order_by(calibrations.c.number)
    return build(c, c.execute(statement).all())


def open_proposals(c: Connection, vehicle_id: str, kind: Kind | None = None) -> list[Calibration]:
    """A vehicle's calibrations that are still proposed, by number."""
    statement = CALIBRATIONS.where(
        calibrations.c.vehicle_id == vehicle_id, calibration_standings.c.standing == "proposed"
    )
    if kind is not None:
        statement = statement.where(calibrations.c.kind == kind)
    return build(c, c.execute(statement.order_by(calibrations.c.number)).all())


def all_open_proposals(c: Connection) -> dict[str, list[Calibration]]:
    """The calibrations of every vehicle that are still proposed, by number."""
    statement = CALIBRATIONS.where(calibration_standings.c.standing == "proposed").order_by(calibrations.c.number)
    proposed: dict[str, list[Calibration]] = {}
    for one in build(c, c.execute(statement).all()):
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


def withdrawn_at(c: Connection, calibration_id: str) -> datetime | None:
    """The moment a calibration was withdrawn; None for one that was not."""
    standings = calibration_standings
    wanted = (standings.c.calibration_id == calibration_id, standings.c.standing == "withdrawn")
    at: datetime | None = c.scalar(select(func.min(standings.c.at, type_=standings.c.at.type)).where(*wanted))
    return at


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
