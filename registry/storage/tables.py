"""The tables. History is append-only: what changes is a new row, and the latest row of a history is what holds.

Four things are kept beside their history because they are asked at every boot or page, and are written in the same
transaction as what moves them: an alert's standing and latest content, the boot sheet, and the lease.
"""

from __future__ import annotations

from typing import Any

from sqlalchemy import (
    Boolean,
    CheckConstraint,
    Column,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    UniqueConstraint,
    text,
)

from registry.storage.column_types import JsonText, Real, UtcTime, Whole

metadata = MetaData(
    naming_convention={
        "pk": "pk_%(table_name)s",
        "fk": "fk_%(table_name)s_%(column_0_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    }
)

_ID = String(32)
_NAME = String(200)


def _sequence() -> Column[Any]:
    """Order of recording. An integer primary key of this form is SQLite's own row number and PostgreSQL's identity."""
    return Column("sequence", Whole(), primary_key=True, autoincrement=True)


def _vehicle(*, nullable: bool = False) -> Column[Any]:
    return Column("vehicle_id", String(64), ForeignKey("vehicles.vehicle_id"), nullable=nullable)


def _recorded() -> list[Column[Any]]:
    return [Column("recorded_at", UtcTime(), nullable=False), Column("recorded_by", _NAME, nullable=False)]


def _reals(*names: str, nullable: bool = True) -> list[Column[Any]]:
    return [Column(name, Real(), nullable=nullable) for name in names]


def _texts(*names: str) -> list[Column[Any]]:
    return [Column(name, Text()) for name in names]


def _one_of(column: str, *values: str) -> CheckConstraint:
    listed = ", ".join(f"'{value}'" for value in values)
    return CheckConstraint(f"{column} IN ({listed})", name=column)


vehicles = Table(
    "vehicles",
    metadata,
    _sequence(),
    Column("vehicle_id", String(64), nullable=False),
    UniqueConstraint("vehicle_id"),
)

vehicle_versions = Table(
    "vehicle_versions",
    metadata,
    Column("vehicle_id", String(64), ForeignKey("vehicles.vehicle_id"), primary_key=True),
    Column("version", Integer(), primary_key=True),
    Column("name", Text(), nullable=False),
    Column("drive", String(16), nullable=False),
    Column("site", Text()),
    Column("serial", Text()),
    *_reals("left_m_per_tick", "right_m_per_tick", "width_m", "max_speed_m_per_s", nullable=False),
    Column("counter_bits", Integer(), nullable=False),
    *_reals("reference_ahead_m", "reference_left_m", nullable=False),
    *_reals("tolerance_tick_factor", "tolerance_side_ratio", "tolerance_width", nullable=False),
    Column("valid_from", UtcTime()),
    *_recorded(),
    _one_of("drive", "tracks", "wheels"),
    CheckConstraint("(version = 1) = (valid_from IS NULL)", name="first_holds_for_all_time_before"),
)

runs = Table(
    "runs",
    metadata,
    _sequence(),
    Column("run_id", _ID, nullable=False),
    _vehicle(),
    Column("run_key", _NAME, nullable=False),
    Column("vehicle_version", Integer(), nullable=False),
    Column("started_at", UtcTime(), nullable=False),
    Column("ended_at", UtcTime(), nullable=False),
    Column("duration_s", Real(), nullable=False),
    Column("samples", Integer(), nullable=False),
    *_reals("distance_m", "turned_rad", nullable=False),
    *_reals("closure_x_m", "closure_y_m", "closure_heading_rad", "closure_distance_m"),
    Column("closure_turns", Integer()),
    *_reals("closure_position_sd_m", "closure_heading_sd_rad"),
    *_texts("start_mark", "end_mark", "course", "surface"),
    Column("load_kg", Real()),
    *_texts("driven_by", "read_by", "instrument", "note"),
    *_reals("misclosure_x_m", "misclosure_y_m", "misclosure_heading_rad", "misclosure_distance_m"),
    Column("content_digest", String(64), nullable=False),
    Column("counts_digest", String(64), nullable=False),
    *_recorded(),
    UniqueConstraint("run_id"),
    UniqueConstraint("vehicle_id", "run_key"),
    ForeignKeyConstraint(
        ["vehicle_id", "vehicle_version"],
        ["vehicle_versions.vehicle_id", "vehicle_versions.version"],
        name="fk_runs_vehicle_version",
    ),
    CheckConstraint("ended_at >= started_at", name="ends_after_start"),
    Index(None, "vehicle_id", "started_at", "sequence"),
    Index(None, "vehicle_id", "ended_at"),
)

run_counts = Table(
    "run_counts",
    metadata,
    Column("run_id", _ID, ForeignKey("runs.run_id"), primary_key=True),
    Column("counts", LargeBinary(), nullable=False),
)

run_maps = Table(
    "run_maps",
    metadata,
    Column("run_id", _ID, ForeignKey("runs.run_id"), primary_key=True),
    Column("map", LargeBinary(), nullable=False),
)

run_states = Table(
    "run_states",
    metadata,
    _sequence(),
    Column("run_id", _ID, ForeignKey("runs.run_id"), nullable=False),
    Column("use", String(16), nullable=False),
    Column("reasons", JsonText(), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("by", _NAME, nullable=False),
    _one_of("use", "usable", "set aside"),
    Index(None, "run_id", "sequence"),
)

calibrations = Table(
    "calibrations",
    metadata,
    _sequence(),
    Column("calibration_id", _ID, nullable=False),
    _vehicle(),
    Column("number", Integer(), nullable=False),
    Column("kind", String(32), nullable=False),
    *_reals("left_m_per_tick", "right_m_per_tick", "width_m", nullable=False),
    Column("covariance_relative", JsonText(), nullable=False),
    Column("observed_tick_factor", Boolean(), nullable=False),
    Column("observed_side_ratio", Boolean(), nullable=False),
    Column("observed_width", Boolean(), nullable=False),
    Column("birge_ratio", Real()),
    Column("coverage_factor", Real(), nullable=False),
    Column("random_error_m_per_sqrt_m", Real()),
    Column("method_version", String(64), nullable=False),
    Column("note", Text()),
    Column("based_on", _ID, ForeignKey("calibrations.calibration_id")),
    Column("reinstates", _ID, ForeignKey("calibrations.calibration_id")),
    *_recorded(),
    UniqueConstraint("calibration_id"),
    UniqueConstraint("vehicle_id", "number"),
    CheckConstraint("left_m_per_tick > 0 AND right_m_per_tick > 0 AND width_m > 0", name="positive"),
    CheckConstraint("(kind = 'reinstated') = (reinstates IS NOT NULL)", name="reinstated_names_its_origin"),
)

calibration_runs = Table(
    "calibration_runs",
    metadata,
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id"), primary_key=True),
    Column("position", Integer(), primary_key=True, autoincrement=False),
    Column("run_id", _ID, ForeignKey("runs.run_id"), nullable=False),
    Column("weight", Real(), nullable=False),
    *_reals("before_x_m", "before_y_m", "before_heading_rad", "before_distance_m"),
    *_reals("after_x_m", "after_y_m", "after_heading_rad", "after_distance_m"),
    *_reals("influence_left", "influence_right", "influence_width", nullable=False),
    Index(None, "run_id"),
)

calibration_standings = Table(
    "calibration_standings",
    metadata,
    _sequence(),
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id"), nullable=False),
    Column("standing", String(16), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("by", _NAME, nullable=False),
    Column("reason", Text()),
    _one_of("standing", "proposed", "in force", "superseded", "withdrawn"),
    Index(None, "calibration_id", "sequence"),
)

in_force = Table(
    "in_force",
    metadata,
    _sequence(),
    _vehicle(),
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id")),
    Column("in_force_from", UtcTime(), nullable=False),
    Column("reason", Text(), nullable=False),
    Column("entered_late", Boolean(), nullable=False),
    *_recorded(),
    Index(None, "vehicle_id", "sequence"),
    Index(None, "calibration_id"),
)

evaluations = Table(
    "evaluations",
    metadata,
    _sequence(),
    Column("evaluation_id", _ID, nullable=False),
    _vehicle(),
    Column("as_of", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("against", _ID, ForeignKey("calibrations.calibration_id")),
    Column("runs_used", Integer(), nullable=False),
    Column("first_run_at", UtcTime()),
    Column("last_run_at", UtcTime()),
    *(
        column
        for quantity in ("tick_factor", "side_ratio", "width")
        for column in (
            *_reals(f"{quantity}_deviation", f"{quantity}_u"),
            Column(f"{quantity}_observed", Boolean(), nullable=False),
            Column(f"{quantity}_probability_beyond", Real()),
        )
    ),
    *_reals("fitted_left_m_per_tick", "fitted_right_m_per_tick", "fitted_width_m"),
    *_reals("fitted_u_left", "fitted_u_right", "fitted_u_width", "coverage_factor"),
    Column("finding", String(16), nullable=False),
    Column("message", Text(), nullable=False),
    Column("proposed_calibration_id", _ID, ForeignKey("calibrations.calibration_id")),
    Column("inputs", Text(), nullable=False),
    UniqueConstraint("evaluation_id"),
    _one_of("finding", "within", "uncertain", "beyond", "cannot_tell"),
    Index(None, "vehicle_id", "as_of", "sequence"),
)


def _alert_content(*, nullable: bool) -> list[Column[Any]]:
    return [
        Column("kind", String(32), nullable=nullable),
        Column("quantity", String(16)),
        Column("message", Text(), nullable=nullable),
        Column("consequence", Text(), nullable=nullable),
        Column("advice", Text(), nullable=nullable),
        Column("priority", String(16), nullable=nullable),
        Column("act_within", String(32), nullable=nullable),
        *_reals("size", "u", "probability_beyond"),
        Column("onset_at", UtcTime()),
        Column("attribution", String(32)),
        Column("shape", String(32)),
    ]


alerts = Table(
    "alerts",
    metadata,
    _sequence(),
    Column("alert_id", _ID, nullable=False),
    _vehicle(nullable=True),
    Column("cause", String(64), nullable=False),
    *_alert_content(nullable=False),
    Column("standing", String(16), nullable=False),
    Column("raised_at", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("updated_at", UtcTime(), nullable=False),
    UniqueConstraint("alert_id"),
    _one_of("standing", "unacknowledged", "acknowledged", "returned", "shelved", "closed"),
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
    _sequence(),
    Column("alert_id", _ID, ForeignKey("alerts.alert_id"), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("by", _NAME, nullable=False),
    Column("what", String(32), nullable=False),
    Column("standing", String(16), nullable=False),
    Column("note", Text()),
    *_alert_content(nullable=True),
    Index(None, "alert_id", "sequence"),
)

maintenance = Table(
    "maintenance",
    metadata,
    _sequence(),
    Column("maintenance_id", _ID, nullable=False),
    _vehicle(),
    Column("done_at", UtcTime(), nullable=False),
    Column("kind", String(32), nullable=False),
    Column("side", String(8)),
    Column("note", Text()),
    Column("ends_window", Boolean(), nullable=False),
    *_recorded(),
    UniqueConstraint("maintenance_id"),
    Index(None, "vehicle_id", "done_at", "sequence"),
)

boots = Table(
    "boots",
    metadata,
    _sequence(),
    Column("boot_id", _ID, nullable=False),
    _vehicle(),
    Column("stated_number", Integer()),
    Column("stated_digest", String(64)),
    Column("source", String(16)),
    Column("stated_booted_at", UtcTime()),
    Column("age_s", Real()),
    Column("software", Text()),
    Column("booted_at", UtcTime(), nullable=False),
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id")),
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
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id"), nullable=False),
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
    Column("calibration_id", _ID, ForeignKey("calibrations.calibration_id"), nullable=False),
    Column("issued_at", UtcTime(), nullable=False),
)

people = Table(
    "people",
    metadata,
    Column("name", _NAME, primary_key=True),
    Column("role", String(16), nullable=False),
    Column("password_hash", Text(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    _one_of("role", "reader", "technician", "approver", "keeper"),
)

keys = Table(
    "keys",
    metadata,
    _sequence(),
    Column("key_id", _ID, nullable=False),
    Column("key_hash", String(64), nullable=False),
    Column("person", _NAME, ForeignKey("people.name")),
    _vehicle(nullable=True),
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
    Column("who", _NAME, nullable=False),
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
    Column("holder", _NAME, nullable=False),
    Column("fence", Whole(), nullable=False),
    Column("expires_at", UtcTime(), nullable=False),
    Column("done_at", UtcTime()),
)
