"""Vehicles and their dated versions. The first version holds for all time before it too."""

from __future__ import annotations

from datetime import datetime
from typing import Any

from sqlalchemy import Row, Select, and_, func, insert, or_, select

from registry.domain.tolerance import Tolerance
from registry.domain.vehicle import Parameters, ReferencePoint, VehicleStatement, VehicleVersion
from registry.errors import NotFound
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import vehicle_versions, vehicles

_newest = vehicle_versions.alias("newest")
_CURRENT: Select[Any] = select(vehicle_versions).where(
    vehicle_versions.c.version
    == select(func.max(_newest.c.version))
    .where(_newest.c.vehicle_id == vehicle_versions.c.vehicle_id)
    .scalar_subquery()
)


def add_version(
    c: Connection, vehicle_id: str, statement: VehicleStatement, recorded_at: datetime, by: str
) -> VehicleVersion:
    """Record the next version of a vehicle; the first one makes the vehicle."""
    last = c.scalar(select(func.max(vehicle_versions.c.version)).where(vehicle_versions.c.vehicle_id == vehicle_id))
    if last is None:
        c.execute(insert(vehicles).values(vehicle_id=vehicle_id))
    made = VehicleVersion(
        vehicle_id=vehicle_id,
        version=(last or 0) + 1,
        statement=statement,
        valid_from=None if last is None else recorded_at,
        recorded_at=recorded_at,
        recorded_by=by,
    )
    c.execute(insert(vehicle_versions), _values(made))
    return made


def find_current(c: Connection, vehicle_id: str) -> VehicleVersion | None:
    """The newest version, or None for a vehicle that is not on the register."""
    row = c.execute(_CURRENT.where(vehicle_versions.c.vehicle_id == vehicle_id)).first()
    return None if row is None else _version(row)


def current(c: Connection, vehicle_id: str) -> VehicleVersion:
    """The newest version.

    Raises
    ------
    NotFound
        No such vehicle.
    """
    found = find_current(c, vehicle_id)
    if found is None:
        raise _unknown(vehicle_id)
    return found


def at(c: Connection, vehicle_id: str, time: datetime) -> VehicleVersion:
    """The version that held at a time.

    Raises
    ------
    NotFound
        No such vehicle.
    """
    held = and_(
        vehicle_versions.c.vehicle_id == vehicle_id,
        or_(vehicle_versions.c.valid_from.is_(None), vehicle_versions.c.valid_from <= time),
    )
    row = c.execute(select(vehicle_versions).where(held).order_by(vehicle_versions.c.version.desc()).limit(1)).first()
    if row is None:
        raise _unknown(vehicle_id)
    return _version(row)


def by_version(c: Connection, vehicle_id: str, version: int) -> VehicleVersion:
    """One version by its number.

    Raises
    ------
    NotFound
        No such vehicle or version.
    """
    wanted = and_(vehicle_versions.c.vehicle_id == vehicle_id, vehicle_versions.c.version == version)
    row = c.execute(select(vehicle_versions).where(wanted)).first()
    if row is None:
        raise NotFound(f"vehicle {vehicle_id!r} has no version {version}")
    return _version(row)


def versions(c: Connection, vehicle_id: str) -> list[VehicleVersion]:
    """All versions of a vehicle, oldest first."""
    wanted = select(vehicle_versions).where(vehicle_versions.c.vehicle_id == vehicle_id)
    return [_version(row) for row in c.execute(wanted.order_by(vehicle_versions.c.version))]


def page(c: Connection, limit: int, after: str | None) -> Page[VehicleVersion]:
    """Current versions, the vehicle registered last first."""
    statement = _CURRENT.join(vehicles, vehicles.c.vehicle_id == vehicle_versions.c.vehicle_id)
    return page_of(c, statement, [vehicles.c.sequence], lambda rows: [_version(row) for row in rows], limit, after)


def all_current(c: Connection) -> list[VehicleVersion]:
    """The current version of every vehicle, by identity."""
    return [_version(row) for row in c.execute(_CURRENT.order_by(vehicle_versions.c.vehicle_id))]


def _unknown(vehicle_id: str) -> NotFound:
    return NotFound(f"there is no vehicle {vehicle_id!r} on the register")


def _values(version: VehicleVersion) -> dict[str, Any]:
    statement = version.statement
    return {
        "vehicle_id": version.vehicle_id,
        "version": version.version,
        "name": statement.name,
        "drive": statement.drive,
        "site": statement.site,
        "serial": statement.serial,
        "left_m_per_tick": statement.nominal.left_m_per_tick,
        "right_m_per_tick": statement.nominal.right_m_per_tick,
        "width_m": statement.nominal.width_m,
        "max_speed_m_per_s": statement.max_speed_m_per_s,
        "counter_bits": statement.counter_bits,
        "reference_ahead_m": statement.reference_point.ahead_m,
        "reference_left_m": statement.reference_point.left_m,
        "tolerance_tick_factor": statement.tolerance.tick_factor,
        "tolerance_side_ratio": statement.tolerance.side_ratio,
        "tolerance_width": statement.tolerance.width,
        "valid_from": version.valid_from,
        "recorded_at": version.recorded_at,
        "recorded_by": version.recorded_by,
    }


def _version(row: Row[Any]) -> VehicleVersion:
    statement = VehicleStatement(
        name=row.name,
        drive=row.drive,
        nominal=Parameters(row.left_m_per_tick, row.right_m_per_tick, row.width_m),
        max_speed_m_per_s=row.max_speed_m_per_s,
        site=row.site,
        serial=row.serial,
        counter_bits=row.counter_bits,
        reference_point=ReferencePoint(row.reference_ahead_m, row.reference_left_m),
        tolerance=Tolerance(row.tolerance_tick_factor, row.tolerance_side_ratio, row.tolerance_width),
    )
    return VehicleVersion(row.vehicle_id, row.version, statement, row.valid_from, row.recorded_at, row.recorded_by)
