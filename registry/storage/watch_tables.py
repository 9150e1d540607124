"""The tables of what happens meanwhile: alerts, maintenance, boots, people and keys, the journal, the lease."""

from __future__ import annotations

from typing import Any

from sqlalchemy import (
    Boolean,
    CheckConstraint,
    Column,
    ForeignKey,
    Index,
    Integer,
    String,
    Table,
    Text,
    UniqueConstraint,
    text,
)

from registry.storage.column_types import JsonText, Real, UtcTime, Whole
from registry.storage.table_parts import ID, NAME, metadata, one_of, reals, recorded, sequence, vehicle


def _alert_content(*, nullable: bool) -> list[Column[Any]]:
    return [
        Column("kind", String(32), nullable=nullable),
        Column("quantity", String(16)),
        Column("message", Text(), nullable=nullable),
        Column("consequence", Text(), nullable=nullable),
        Column("advice", Text(), nullable=nullable),
        Column("priority", String(16), nullable=nullable),
        Column("act_within", String(32), nullable=nullable),
        *reals("size", "u", "probability_beyond"),
        Column("onset_at", UtcTime()),
        Column("attribution", String(32)),
        Column("shape", String(32)),
    ]


alerts = Table(
    "alerts",
    metadata,
    sequence(),
    Column("alert_id", ID, nullable=False),
    vehicle(nullable=True),
    Column("cause", String(64), nullable=False),
    *_alert_content(nullable=False),
    Column("standing", String(16), nullable=False),
    Column("raised_at", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("updated_at", UtcTime(), nullable=False),
    UniqueConstraint("alert_id"),
    one_of("standing", "unacknowledged", "acknowledged", "returned", "shelved", "closed"),
    Index(
        "ix_alerts_one_open_a_cause",
        "vehicle_id",
        "cause",
        unique=True,
        sqlite_where=text("standing <> 'closed'"),
        postgresql_where=text("standing <> 'closed'"),
    ),
    Index(None, "raised_at", "sequence"),
    Index(None, "vehicle_id", "raised_at"),
)

alert_events = Table(
    "alert_events",
    metadata,
    sequence(),
    Column("alert_id", ID, ForeignKey("alerts.alert_id"), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("by", NAME, nullable=False),
    Column("what", String(32), nullable=False),
    Column("standing", String(16), nullable=False),
    Column("note", Text()),
    *_alert_content(nullable=True),
    Index(None, "alert_id", "sequence"),
)

maintenance = Table(
    "maintenance",
    metadata,
    sequence(),
    Column("maintenance_id", ID, nullable=False),
    vehicle(),
    Column("done_at", UtcTime(), nullable=False),
    Column("kind", String(32), nullable=False),
    Column("side", String(8)),
    Column("note", Text()),
    Column("ends_window", Boolean(), nullable=False),
    *recorded(),
    UniqueConstraint("maintenance_id"),
    Index(None, "vehicle_id", "done_at", "sequence"),
)

boots = Table(
    "boots",
    metadata,
    sequence(),
    Column("boot_id", ID, nullable=False),
    vehicle(),
    Column("stated_number", Integer()),
    Column("stated_digest", String(64)),
    Column("source", String(16)),
    Column("stated_booted_at", UtcTime()),
    Column("age_s", Real()),
    Column("software", Text()),
    Column("booted_at", UtcTime(), nullable=False),
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id")),
    Column("matched", Boolean(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    UniqueConstraint("boot_id"),
    Index(None, "vehicle_id", "booted_at", "sequence"),
    Index(None, "calibration_id"),
)

boot_sheets = Table(
    "boot_sheets",
    metadata,
    Column("vehicle_id", String(64), ForeignKey("vehicles.vehicle_id"), primary_key=True),
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id"), nullable=False),
    Column("calibration_number", Integer(), nullable=False),
    Column("head", Text(), nullable=False),
    Column("digest", String(64), nullable=False),
    Column("condition", String(16), nullable=False),
    Column("reasons", JsonText(), nullable=False),
    Column("answer", Text(), nullable=False),
)

issued_digests = Table(
    "issued_digests",
    metadata,
    Column("vehicle_id", String(64), ForeignKey("vehicles.vehicle_id"), primary_key=True),
    Column("digest", String(64), primary_key=True),
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id"), nullable=False),
    Column("issued_at", UtcTime(), nullable=False),
)

people = Table(
    "people",
    metadata,
    Column("name", NAME, primary_key=True),
    Column("role", String(16), nullable=False),
    Column("password_hash", Text(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    one_of("role", "reader", "technician", "approver", "keeper"),
)

keys = Table(
    "keys",
    metadata,
    sequence(),
    Column("key_id", ID, nullable=False),
    Column("key_hash", String(64), nullable=False),
    Column("person", NAME, ForeignKey("people.name")),
    vehicle(nullable=True),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("revoked_at", UtcTime()),
    UniqueConstraint("key_id"),
    UniqueConstraint("key_hash"),
    CheckConstraint("(person IS NULL) <> (vehicle_id IS NULL)", name="one_owner"),
    Index(None, "vehicle_id", "sequence"),
)

journal = Table(
    "journal",
    metadata,
    Column("entry", Whole(), primary_key=True, autoincrement=False),
    Column("at", UtcTime(), nullable=False),
    Column("who", NAME, nullable=False),
    Column("action", String(64), nullable=False),
    Column("vehicle_id", String(64)),
    Column("what", Text(), nullable=False),
    Column("previous_hash", String(64), nullable=False),
    Column("hash", String(64), nullable=False),
    Index(None, "vehicle_id", "entry"),
)

leases = Table(
    "leases",
    metadata,
    Column("name", String(64), primary_key=True),
    Column("holder", NAME, nullable=False),
    Column("fence", Whole(), nullable=False),
    Column("expires_at", UtcTime(), nullable=False),
    Column("done_at", UtcTime()),
)
