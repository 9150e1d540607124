"""What tables are made of: the names that constraints get, and the columns that many tables share."""

from __future__ import annotations

from typing import Any

from sqlalchemy import CheckConstraint, Column, ForeignKey, MetaData, String, Text

from registry.storage.column_types import Real, UtcTime, Whole

metadata = MetaData(
    naming_convention={
        "pk": "pk_%(table_name)s",
        "fk": "fk_%(table_name)s_%(column_0_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    }
)

ID = String(32)
NAME = String(200)


def sequence() -> Column[Any]:
    """Order of recording. An integer primary key of this form is SQLite's own row number and PostgreSQL's identity."""
    return Column("sequence", Whole(), primary_key=True, autoincrement=True)


def vehicle(*, nullable: bool = False) -> Column[Any]:
    return Column("vehicle_id", String(64), ForeignKey("vehicles.vehicle_id"), nullable=nullable)


def recorded() -> list[Column[Any]]:
    return [Column("recorded_at", UtcTime(), nullable=False), Column("recorded_by", NAME, nullable=False)]


def reals(*names: str, nullable: bool = True) -> list[Column[Any]]:
    return [Column(name, Real(), nullable=nullable) for name in names]


def texts(*names: str) -> list[Column[Any]]:
    return [Column(name, Text()) for name in names]


def one_of(column: str, *values: str) -> CheckConstraint:
    listed = ", ".join(f"'{value}'" for value in values)
    return CheckConstraint(f"{column} IN ({listed})", name=column)
