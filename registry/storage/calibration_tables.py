"""The tables of what is calibrated: vehicles, runs, calibrations, evaluations."""

from __future__ import annotations

from sqlalchemy import (
    Boolean,
    CheckConstraint,
    Column,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    String,
    Table,
    Text,
    UniqueConstraint,
)

from registry.storage.column_types import JsonText, Real, UtcTime
from registry.storage.table_parts import ID, NAME, metadata, one_of, reals, recorded, sequence, texts, vehicle

vehicles = Table(
    "vehicles",
    metadata,
    sequence(),
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
    *reals("left_m_per_tick", "right_m_per_tick", "width_m", "max_speed_m_per_s", nullable=False),
    Column("counter_bits", Integer(), nullable=False),
    *reals("reference_ahead_m", "reference_left_m", nullable=False),
    *reals("tolerance_tick_factor", "tolerance_side_ratio", "tolerance_width", nullable=False),
    Column("valid_from", UtcTime()),
    *recorded(),
    one_of("drive", "tracks", "wheels"),
    CheckConstraint("(version = 1) = (valid_from IS NULL)", name="first_holds_for_all_time_before"),
)

runs = Table(
    "runs",
    metadata,
    sequence(),
    Column("run_id", ID, nullable=False),
    vehicle(),
    Column("run_key", NAME, nullable=False),
    Column("vehicle_version", Integer(), nullable=False),
    Column("started_at", UtcTime(), nullable=False),
    Column("ended_at", UtcTime(), nullable=False),
    Column("duration_s", Real(), nullable=False),
    Column("samples", Integer(), nullable=False),
    *reals("distance_m", "turned_rad", nullable=False),
    *reals("closure_x_m", "closure_y_m", "closure_heading_rad", "closure_distance_m"),
    Column("closure_turns", Integer()),
    *reals("closure_position_sd_m", "closure_heading_sd_rad"),
    *texts("start_mark", "end_mark", "course", "surface"),
    Column("load_kg", Real()),
    *texts("driven_by", "read_by", "instrument", "note"),
    *reals("misclosure_x_m", "misclosure_y_m", "misclosure_heading_rad", "misclosure_distance_m"),
    Column("content_digest", String(64), nullable=False),
    Column("counts_digest", String(64), nullable=False),
    *recorded(),
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
    Column("run_id", ID, ForeignKey("runs.run_id"), primary_key=True),
    Column("counts", LargeBinary(), nullable=False),
)

run_maps = Table(
    "run_maps",
    metadata,
    Column("run_id", ID, ForeignKey("runs.run_id"), primary_key=True),
    Column("map", LargeBinary(), nullable=False),
)

run_states = Table(
    "run_states",
    metadata,
    sequence(),
    Column("run_id", ID, ForeignKey("runs.run_id"), nullable=False),
    Column("use", String(16), nullable=False),
    Column("reasons", JsonText(), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("by", NAME, nullable=False),
    one_of("use", "usable", "set aside"),
    Index(None, "run_id", "sequence"),
)

calibrations = Table(
    "calibrations",
    metadata,
    sequence(),
    Column("calibration_id", ID, nullable=False),
    vehicle(),
    Column("number", Integer(), nullable=False),
    Column("kind", String(32), nullable=False),
    *reals("left_m_per_tick", "right_m_per_tick", "width_m", nullable=False),
    Column("covariance_relative", JsonText(), nullable=False),
    Column("observed_tick_factor", Boolean(), nullable=False),
    Column("observed_side_ratio", Boolean(), nullable=False),
    Column("observed_width", Boolean(), nullable=False),
    Column("birge_ratio", Real()),
    Column("coverage_factor", Real(), nullable=False),
    Column("random_error_m_per_sqrt_m", Real()),
    Column("method_version", String(64), nullable=False),
    Column("note", Text()),
    Column("based_on", ID, ForeignKey("calibrations.calibration_id")),
    Column("reinstates", ID, ForeignKey("calibrations.calibration_id")),
    *recorded(),
    UniqueConstraint("calibration_id"),
    UniqueConstraint("vehicle_id", "number"),
    CheckConstraint("left_m_per_tick > 0 AND right_m_per_tick > 0 AND width_m > 0", name="positive"),
    CheckConstraint("(kind = 'reinstated') = (reinstates IS NOT NULL)", name="reinstated_names_its_origin"),
)

calibration_runs = Table(
    "calibration_runs",
    metadata,
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id"), primary_key=True),
    Column("position", Integer(), primary_key=True, autoincrement=False),
    Column("run_id", ID, ForeignKey("runs.run_id"), nullable=False),
    Column("weight", Real(), nullable=False),
    *reals("before_x_m", "before_y_m", "before_heading_rad", "before_distance_m"),
    *reals("after_x_m", "after_y_m", "after_heading_rad", "after_distance_m"),
    *reals("influence_left", "influence_right", "influence_width", nullable=False),
    Index(None, "run_id"),
)

calibration_standings = Table(
    "calibration_standings",
    metadata,
    sequence(),
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id"), nullable=False),
    Column("standing", String(16), nullable=False),
    Column("at", UtcTime(), nullable=False),
    Column("by", NAME, nullable=False),
    Column("reason", Text()),
    one_of("standing", "proposed", "in force", "superseded", "withdrawn"),
    Index(None, "calibration_id", "sequence"),
)

in_force = Table(
    "in_force",
    metadata,
    sequence(),
    vehicle(),
    Column("calibration_id", ID, ForeignKey("calibrations.calibration_id")),
    Column("in_force_from", UtcTime(), nullable=False),
    Column("reason", Text(), nullable=False),
    Column("entered_late", Boolean(), nullable=False),
    *recorded(),
    Index(None, "vehicle_id", "sequence"),
    Index(None, "calibration_id"),
)

evaluations = Table(
    "evaluations",
    metadata,
    sequence(),
    Column("evaluation_id", ID, nullable=False),
    vehicle(),
    Column("as_of", UtcTime(), nullable=False),
    Column("recorded_at", UtcTime(), nullable=False),
    Column("against", ID, ForeignKey("calibrations.calibration_id")),
    Column("runs_used", Integer(), nullable=False),
    Column("first_run_at", UtcTime()),
    Column("last_run_at", UtcTime()),
    *(
        column
        for quantity in ("tick_factor", "side_ratio", "width")
        for column in (
            *reals(f"{quantity}_deviation", f"{quantity}_u"),
            Column(f"{quantity}_observed", Boolean(), nullable=False),
            Column(f"{quantity}_probability_beyond", Real()),
        )
    ),
    *reals("fitted_left_m_per_tick", "fitted_right_m_per_tick", "fitted_width_m"),
    *reals("fitted_u_left", "fitted_u_right", "fitted_u_width", "coverage_factor"),
    Column("finding", String(16), nullable=False),
    Column("message", Text(), nullable=False),
    Column("proposed_calibration_id", ID, ForeignKey("calibrations.calibration_id")),
    Column("inputs", Text(), nullable=False),
    UniqueConstraint("evaluation_id"),
    one_of("finding", "within", "uncertain", "beyond", "cannot_tell"),
    Index(None, "vehicle_id", "as_of", "sequence"),
)
