"""What each vehicle should have driven on, when, and when that was known. Append-only."""

from __future__ import annotations

from datetime import datetime
from typing import Any

from sqlalchemy import Row, Select, func, insert, select

from registry.domain.calibration import InForce
from registry.domain.vehicle import Parameters
from registry.storage.engine import Connection
from registry.storage.tables import calibrations
from registry.storage.tables import in_force as entries

_ENTRIES: Select[Any] = select(entries, calibrations.c.number).outerjoin(
    calibrations, calibrations.c.calibration_id == entries.c.calibration_id
)


def put_in_force(
    c: Connection,
    vehicle_id: str,
    calibration_id: str | None,
    in_force_from: datetime,
    recorded_at: datetime,
    by: str,
    reason: str,
    entered_late: bool,
) -> InForce:
    """Record what a vehicle should drive on from a time on; None is nothing."""
    made = c.execute(
        insert(entries).values(
            vehicle_id=vehicle_id,
            calibration_id=calibration_id,
            in_force_from=in_force_from,
            recorded_at=recorded_at,
            recorded_by=by,
            reason=reason,
            entered_late=entered_late,
        )
    )
    (sequence,) = made.inserted_primary_key or (None,)
    return _entry(c.execute(_ENTRIES.where(entries.c.sequence == sequence)).one())


def in_force(
    c: Connection, vehicle_id: str, at: datetime | None = None, known_at: datetime | None = None
) -> InForce | None:
    """What was in force for a vehicle, in one query.

    Parameters
    ----------
    at
        The moment asked about; None is the latest entry.
    known_at
        Only what had been recorded by then; None is everything.

    Returns
    -------
    InForce or None
        The entry that held; its ``calibration_id`` is None when the last one was withdrawn without another in its
        place. None when there was no entry yet.
    """
    statement = _ENTRIES.where(entries.c.vehicle_id == vehicle_id)
    if at is not None:
        statement = statement.where(entries.c.in_force_from <= at)
    if known_at is not None:
        statement = statement.where(entries.c.recorded_at <= known_at)
    row = c.execute(statement.order_by(entries.c.sequence.desc()).limit(1)).first()
    return None if row is None else _entry(row)


def in_force_history(c: Connection, vehicle_id: str) -> list[InForce]:
    """All entries of a vehicle, oldest first."""
    statement = _ENTRIES.where(entries.c.vehicle_id == vehicle_id).order_by(entries.c.sequence)
    return [_entry(row) for row in c.execute(statement)]


def parameters_in_force(c: Connection) -> dict[str, Parameters]:
    """The values that each vehicle should drive on now, in one query; vehicles with nothing in force are left out."""
    latest = select(func.max(entries.c.sequence)).group_by(entries.c.vehicle_id)
    values = (calibrations.c.left_m_per_tick, calibrations.c.right_m_per_tick, calibrations.c.width_m)
    statement = select(entries.c.vehicle_id, *values).join(
        calibrations, calibrations.c.calibration_id == entries.c.calibration_id
    )
    rows = c.execute(statement.where(entries.c.sequence.in_(latest)))
    return {row.vehicle_id: Parameters(row.left_m_per_tick, row.right_m_per_tick, row.width_m) for row in rows}


def all_in_force(c: Connection) -> dict[str, InForce]:
    """The latest entry of every vehicle that has one."""
    latest = select(func.max(entries.c.sequence)).group_by(entries.c.vehicle_id)
    return {row.vehicle_id: _entry(row) for row in c.execute(_ENTRIES.where(entries.c.sequence.in_(latest)))}


def _entry(row: Row[Any]) -> InForce:
    return InForce(
        sequence=row.sequence,
        vehicle_id=row.vehicle_id,
        calibration_id=row.calibration_id,
        number=row.number,
        in_force_from=row.in_force_from,
        recorded_at=row.recorded_at,
        recorded_by=row.recorded_by,
        reason=row.reason,
        entered_late=row.entered_late,
    )
