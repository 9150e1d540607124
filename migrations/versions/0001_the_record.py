"""The record as it begins."""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

WHOLE = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
TIME = sa.DateTime(timezone=True)
REAL = sa.Double()


def upgrade() -> None:
    op.create_table(
        "journal",
        sa.Column("entry", WHOLE, autoincrement=False, nullable=False),
        sa.Column("at", TIME, nullable=False),
        sa.Column("who", sa.String(length=200), nullable=False),
        sa.Column("action", sa.String(length=64), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=True),
        sa.Column("what", sa.Text(), nullable=False),
        sa.Column("previous_hash", sa.String(length=64), nullable=False),
        sa.Column("hash", sa.String(length=64), nullable=False),
        sa.PrimaryKeyConstraint("entry", name=op.f("pk_journal")),
    )
    op.create_index(op.f("ix_journal_vehicle_id_entry"), "journal", ["vehicle_id", "entry"], unique=False)
    op.create_table(
        "leases",
        sa.Column("name", sa.String(length=64), nullable=False),
        sa.Column("holder", sa.String(length=200), nullable=False),
        sa.Column("fence", WHOLE, nullable=False),
        sa.Column("expires_at", TIME, nullable=False),
        sa.Column("done_at", TIME, nullable=True),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_leases")),
    )
    op.create_table(
        "people",
        sa.Column("name", sa.String(length=200), nullable=False),
        sa.Column("role", sa.String(length=16), nullable=False),
        sa.Column("password_hash", sa.Text(), nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.CheckConstraint("role IN ('reader', 'technician', 'approver', 'keeper')", name=op.f("ck_people_role")),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_people")),
    )
    op.create_table(
        "vehicles",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_vehicles")),
        sa.UniqueConstraint("vehicle_id", name=op.f("uq_vehicles_vehicle_id")),
    )
    op.create_table(
        "alerts",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("alert_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=True),
        sa.Column("cause", sa.String(length=64), nullable=False),
        sa.Column("kind", sa.String(length=32), nullable=False),
        sa.Column("quantity", sa.String(length=16), nullable=True),
        sa.Column("message", sa.Text(), nullable=False),
        sa.Column("consequence", sa.Text(), nullable=False),
        sa.Column("advice", sa.Text(), nullable=False),
        sa.Column("priority", sa.String(length=16), nullable=False),
        sa.Column("act_within", sa.String(length=32), nullable=False),
        sa.Column("size", REAL, nullable=True),
        sa.Column("u", REAL, nullable=True),
        sa.Column("probability_beyond", REAL, nullable=True),
        sa.Column("onset_at", TIME, nullable=True),
        sa.Column("attribution", sa.String(length=32), nullable=True),
        sa.Column("shape", sa.String(length=32), nullable=True),
        sa.Column("standing", sa.String(length=16), nullable=False),
        sa.Column("raised_at", TIME, nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("updated_at", TIME, nullable=False),
        sa.CheckConstraint(
            "standing IN ('unacknowledged', 'acknowledged', 'returned', 'shelved', 'closed')",
            name=op.f("ck_alerts_standing"),
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_alerts_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_alerts")),
        sa.UniqueConstraint("alert_id", name=op.f("uq_alerts_alert_id")),
    )
    op.create_index(
        "ix_alerts_one_open_a_cause",
        "alerts",
        ["vehicle_id", "cause"],
        unique=True,
        sqlite_where=sa.text("standing <> 'closed'"),
        postgresql_where=sa.text("standing <> 'closed'"),
    )
    op.create_index(op.f("ix_alerts_raised_at_sequence"), "alerts", ["raised_at", "sequence"], unique=False)
    op.create_index(op.f("ix_alerts_vehicle_id_raised_at"), "alerts", ["vehicle_id", "raised_at"], unique=False)
    op.create_table(
        "calibrations",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("kind", sa.String(length=32), nullable=False),
        sa.Column("left_m_per_tick", REAL, nullable=False),
        sa.Column("right_m_per_tick", REAL, nullable=False),
        sa.Column("width_m", REAL, nullable=False),
        sa.Column("covariance_relative", sa.Text(), nullable=False),
        sa.Column("observed_tick_factor", sa.Boolean(), nullable=False),
        sa.Column("observed_side_ratio", sa.Boolean(), nullable=False),
        sa.Column("observed_width", sa.Boolean(), nullable=False),
        sa.Column("birge_ratio", REAL, nullable=True),
        sa.Column("coverage_factor", REAL, nullable=False),
        sa.Column("random_error_m_per_sqrt_m", REAL, nullable=True),
        sa.Column("method_version", sa.String(length=64), nullable=False),
        sa.Column("note", sa.Text(), nullable=True),
        sa.Column("based_on", sa.String(length=32), nullable=True),
        sa.Column("reinstates", sa.String(length=32), nullable=True),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("recorded_by", sa.String(length=200), nullable=False),
        sa.CheckConstraint(
            "(kind = 'reinstated') = (reinstates IS NOT NULL)", name=op.f("ck_calibrations_reinstated_names_its_origin")
        ),
        sa.CheckConstraint(
            "left_m_per_tick > 0 AND right_m_per_tick > 0 AND width_m > 0", name=op.f("ck_calibrations_positive")
        ),
        sa.ForeignKeyConstraint(["based_on"], ["calibrations.calibration_id"], name=op.f("fk_calibrations_based_on")),
        sa.ForeignKeyConstraint(
            ["reinstates"], ["calibrations.calibration_id"], name=op.f("fk_calibrations_reinstates")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_calibrations_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_calibrations")),
        sa.UniqueConstraint("calibration_id", name=op.f("uq_calibrations_calibration_id")),
        sa.UniqueConstraint("vehicle_id", "number", name=op.f("uq_calibrations_vehicle_id_number")),
    )
    op.create_table(
        "keys",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("key_id", sa.String(length=32), nullable=False),
        sa.Column("key_hash", sa.String(length=64), nullable=False),
        sa.Column("person", sa.String(length=200), nullable=True),
        sa.Column("vehicle_id", sa.String(length=64), nullable=True),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("revoked_at", TIME, nullable=True),
        sa.CheckConstraint("(person IS NULL) <> (vehicle_id IS NULL)", name=op.f("ck_keys_one_owner")),
        sa.ForeignKeyConstraint(["person"], ["people.name"], name=op.f("fk_keys_person")),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_keys_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_keys")),
        sa.UniqueConstraint("key_hash", name=op.f("uq_keys_key_hash")),
        sa.UniqueConstraint("key_id", name=op.f("uq_keys_key_id")),
    )
    op.create_index(op.f("ix_keys_vehicle_id_sequence"), "keys", ["vehicle_id", "sequence"], unique=False)
    op.create_table(
        "maintenance",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("maintenance_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("done_at", TIME, nullable=False),
        sa.Column("kind", sa.String(length=32), nullable=False),
        sa.Column("side", sa.String(length=8), nullable=True),
        sa.Column("note", sa.Text(), nullable=True),
        sa.Column("ends_window", sa.Boolean(), nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("recorded_by", sa.String(length=200), nullable=False),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_maintenance_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_maintenance")),
        sa.UniqueConstraint("maintenance_id", name=op.f("uq_maintenance_maintenance_id")),
    )
    op.create_index(
        op.f("ix_maintenance_vehicle_id_done_at_sequence"),
        "maintenance",
        ["vehicle_id", "done_at", "sequence"],
        unique=False,
    )
    op.create_table(
        "vehicle_versions",
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("drive", sa.String(length=16), nullable=False),
        sa.Column("site", sa.Text(), nullable=True),
        sa.Column("serial", sa.Text(), nullable=True),
        sa.Column("left_m_per_tick", REAL, nullable=False),
        sa.Column("right_m_per_tick", REAL, nullable=False),
        sa.Column("width_m", REAL, nullable=False),
        sa.Column("max_speed_m_per_s", REAL, nullable=False),
        sa.Column("counter_bits", sa.Integer(), nullable=False),
        sa.Column("reference_ahead_m", REAL, nullable=False),
        sa.Column("reference_left_m", REAL, nullable=False),
        sa.Column("tolerance_tick_factor", REAL, nullable=False),
        sa.Column("tolerance_side_ratio", REAL, nullable=False),
        sa.Column("tolerance_width", REAL, nullable=False),
        sa.Column("valid_from", TIME, nullable=True),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("recorded_by", sa.String(length=200), nullable=False),
        sa.CheckConstraint("drive IN ('tracks', 'wheels')", name=op.f("ck_vehicle_versions_drive")),
        sa.CheckConstraint(
            "(version = 1) = (valid_from IS NULL)", name=op.f("ck_vehicle_versions_first_holds_for_all_time_before")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_vehicle_versions_vehicle_id")),
        sa.PrimaryKeyConstraint("vehicle_id", "version", name=op.f("pk_vehicle_versions")),
    )
    op.create_table(
        "alert_events",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("alert_id", sa.String(length=32), nullable=False),
        sa.Column("at", TIME, nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("by", sa.String(length=200), nullable=False),
        sa.Column("what", sa.String(length=32), nullable=False),
        sa.Column("standing", sa.String(length=16), nullable=False),
        sa.Column("note", sa.Text(), nullable=True),
        sa.Column("kind", sa.String(length=32), nullable=True),
        sa.Column("quantity", sa.String(length=16), nullable=True),
        sa.Column("message", sa.Text(), nullable=True),
        sa.Column("consequence", sa.Text(), nullable=True),
        sa.Column("advice", sa.Text(), nullable=True),
        sa.Column("priority", sa.String(length=16), nullable=True),
        sa.Column("act_within", sa.String(length=32), nullable=True),
        sa.Column("size", REAL, nullable=True),
        sa.Column("u", REAL, nullable=True),
        sa.Column("probability_beyond", REAL, nullable=True),
        sa.Column("onset_at", TIME, nullable=True),
        sa.Column("attribution", sa.String(length=32), nullable=True),
        sa.Column("shape", sa.String(length=32), nullable=True),
        sa.ForeignKeyConstraint(["alert_id"], ["alerts.alert_id"], name=op.f("fk_alert_events_alert_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_alert_events")),
    )
    op.create_index(op.f("ix_alert_events_alert_id_sequence"), "alert_events", ["alert_id", "sequence"], unique=False)
    op.create_table(
        "boot_sheets",
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=False),
        sa.Column("calibration_number", sa.Integer(), nullable=False),
        sa.Column("head", sa.Text(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("condition", sa.String(length=16), nullable=False),
        sa.Column("reasons", sa.Text(), nullable=False),
        sa.Column("answer", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_boot_sheets_calibration_id")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_boot_sheets_vehicle_id")),
        sa.PrimaryKeyConstraint("vehicle_id", name=op.f("pk_boot_sheets")),
    )
    op.create_table(
        "boots",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("boot_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("stated_number", sa.Integer(), nullable=True),
        sa.Column("stated_digest", sa.String(length=64), nullable=True),
        sa.Column("source", sa.String(length=16), nullable=True),
        sa.Column("stated_booted_at", TIME, nullable=True),
        sa.Column("age_s", REAL, nullable=True),
        sa.Column("software", sa.Text(), nullable=True),
        sa.Column("booted_at", TIME, nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=True),
        sa.Column("matched", sa.Boolean(), nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_boots_calibration_id")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_boots_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_boots")),
        sa.UniqueConstraint("boot_id", name=op.f("uq_boots_boot_id")),
    )
    op.create_index(op.f("ix_boots_calibration_id"), "boots", ["calibration_id"], unique=False)
    op.create_index(
        op.f("ix_boots_vehicle_id_booted_at_sequence"), "boots", ["vehicle_id", "booted_at", "sequence"], unique=False
    )
    op.create_table(
        "calibration_standings",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=False),
        sa.Column("standing", sa.String(length=16), nullable=False),
        sa.Column("at", TIME, nullable=False),
        sa.Column("by", sa.String(length=200), nullable=False),
        sa.Column("reason", sa.Text(), nullable=True),
        sa.CheckConstraint(
            "standing IN ('proposed', 'in force', 'superseded', 'withdrawn')",
            name=op.f("ck_calibration_standings_standing"),
        ),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_calibration_standings_calibration_id")
        ),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_calibration_standings")),
    )
    op.create_index(
        op.f("ix_calibration_standings_calibration_id_sequence"),
        "calibration_standings",
        ["calibration_id", "sequence"],
        unique=False,
    )
    op.create_table(
        "evaluations",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("evaluation_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("as_of", TIME, nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("against", sa.String(length=32), nullable=True),
        sa.Column("runs_used", sa.Integer(), nullable=False),
        sa.Column("first_run_at", TIME, nullable=True),
        sa.Column("last_run_at", TIME, nullable=True),
        sa.Column("tick_factor_deviation", REAL, nullable=True),
        sa.Column("tick_factor_u", REAL, nullable=True),
        sa.Column("tick_factor_observed", sa.Boolean(), nullable=False),
        sa.Column("tick_factor_probability_beyond", REAL, nullable=True),
        sa.Column("side_ratio_deviation", REAL, nullable=True),
        sa.Column("side_ratio_u", REAL, nullable=True),
        sa.Column("side_ratio_observed", sa.Boolean(), nullable=False),
        sa.Column("side_ratio_probability_beyond", REAL, nullable=True),
        sa.Column("width_deviation", REAL, nullable=True),
        sa.Column("width_u", REAL, nullable=True),
        sa.Column("width_observed", sa.Boolean(), nullable=False),
        sa.Column("width_probability_beyond", REAL, nullable=True),
        sa.Column("fitted_left_m_per_tick", REAL, nullable=True),
        sa.Column("fitted_right_m_per_tick", REAL, nullable=True),
        sa.Column("fitted_width_m", REAL, nullable=True),
        sa.Column("fitted_u_left", REAL, nullable=True),
        sa.Column("fitted_u_right", REAL, nullable=True),
        sa.Column("fitted_u_width", REAL, nullable=True),
        sa.Column("coverage_factor", REAL, nullable=True),
        sa.Column("finding", sa.String(length=16), nullable=False),
        sa.Column("message", sa.Text(), nullable=False),
        sa.Column("proposed_calibration_id", sa.String(length=32), nullable=True),
        sa.Column("inputs", sa.Text(), nullable=False),
        sa.CheckConstraint(
            "finding IN ('within', 'uncertain', 'beyond', 'cannot_tell')", name=op.f("ck_evaluations_finding")
        ),
        sa.ForeignKeyConstraint(["against"], ["calibrations.calibration_id"], name=op.f("fk_evaluations_against")),
        sa.ForeignKeyConstraint(
            ["proposed_calibration_id"],
            ["calibrations.calibration_id"],
            name=op.f("fk_evaluations_proposed_calibration_id"),
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_evaluations_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_evaluations")),
        sa.UniqueConstraint("evaluation_id", name=op.f("uq_evaluations_evaluation_id")),
    )
    op.create_index(
        op.f("ix_evaluations_vehicle_id_as_of_sequence"),
        "evaluations",
        ["vehicle_id", "as_of", "sequence"],
        unique=False,
    )
    op.create_table(
        "in_force",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=True),
        sa.Column("in_force_from", TIME, nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("entered_late", sa.Boolean(), nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("recorded_by", sa.String(length=200), nullable=False),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_in_force_calibration_id")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_in_force_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_in_force")),
    )
    op.create_index(op.f("ix_in_force_calibration_id"), "in_force", ["calibration_id"], unique=False)
    op.create_index(op.f("ix_in_force_vehicle_id_sequence"), "in_force", ["vehicle_id", "sequence"], unique=False)
    op.create_table(
        "issued_digests",
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("calibration_id", sa.String(length=32), nullable=False),
        sa.Column("issued_at", TIME, nullable=False),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_issued_digests_calibration_id")
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_issued_digests_vehicle_id")),
        sa.PrimaryKeyConstraint("vehicle_id", "digest", name=op.f("pk_issued_digests")),
    )
    op.create_table(
        "runs",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("run_id", sa.String(length=32), nullable=False),
        sa.Column("vehicle_id", sa.String(length=64), nullable=False),
        sa.Column("run_key", sa.String(length=200), nullable=False),
        sa.Column("vehicle_version", sa.Integer(), nullable=False),
        sa.Column("started_at", TIME, nullable=False),
        sa.Column("ended_at", TIME, nullable=False),
        sa.Column("duration_s", REAL, nullable=False),
        sa.Column("samples", sa.Integer(), nullable=False),
        sa.Column("distance_m", REAL, nullable=False),
        sa.Column("turned_rad", REAL, nullable=False),
        sa.Column("closure_x_m", REAL, nullable=True),
        sa.Column("closure_y_m", REAL, nullable=True),
        sa.Column("closure_heading_rad", REAL, nullable=True),
        sa.Column("closure_distance_m", REAL, nullable=True),
        sa.Column("closure_turns", sa.Integer(), nullable=True),
        sa.Column("closure_position_sd_m", REAL, nullable=True),
        sa.Column("closure_heading_sd_rad", REAL, nullable=True),
        sa.Column("start_mark", sa.Text(), nullable=True),
        sa.Column("end_mark", sa.Text(), nullable=True),
        sa.Column("course", sa.Text(), nullable=True),
        sa.Column("surface", sa.Text(), nullable=True),
        sa.Column("load_kg", REAL, nullable=True),
        sa.Column("driven_by", sa.Text(), nullable=True),
        sa.Column("read_by", sa.Text(), nullable=True),
        sa.Column("instrument", sa.Text(), nullable=True),
        sa.Column("note", sa.Text(), nullable=True),
        sa.Column("misclosure_x_m", REAL, nullable=True),
        sa.Column("misclosure_y_m", REAL, nullable=True),
        sa.Column("misclosure_heading_rad", REAL, nullable=True),
        sa.Column("misclosure_distance_m", REAL, nullable=True),
        sa.Column("content_digest", sa.String(length=64), nullable=False),
        sa.Column("counts_digest", sa.String(length=64), nullable=False),
        sa.Column("recorded_at", TIME, nullable=False),
        sa.Column("recorded_by", sa.String(length=200), nullable=False),
        sa.CheckConstraint("ended_at >= started_at", name=op.f("ck_runs_ends_after_start")),
        sa.ForeignKeyConstraint(
            ["vehicle_id", "vehicle_version"],
            ["vehicle_versions.vehicle_id", "vehicle_versions.version"],
            name="fk_runs_vehicle_version",
        ),
        sa.ForeignKeyConstraint(["vehicle_id"], ["vehicles.vehicle_id"], name=op.f("fk_runs_vehicle_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_runs")),
        sa.UniqueConstraint("run_id", name=op.f("uq_runs_run_id")),
        sa.UniqueConstraint("vehicle_id", "run_key", name=op.f("uq_runs_vehicle_id_run_key")),
    )
    op.create_index(op.f("ix_runs_vehicle_id_ended_at"), "runs", ["vehicle_id", "ended_at"], unique=False)
    op.create_index(
        op.f("ix_runs_vehicle_id_started_at_sequence"), "runs", ["vehicle_id", "started_at", "sequence"], unique=False
    )
    op.create_table(
        "calibration_runs",
        sa.Column("calibration_id", sa.String(length=32), nullable=False),
        sa.Column("position", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("run_id", sa.String(length=32), nullable=False),
        sa.Column("weight", REAL, nullable=False),
        sa.Column("before_x_m", REAL, nullable=True),
        sa.Column("before_y_m", REAL, nullable=True),
        sa.Column("before_heading_rad", REAL, nullable=True),
        sa.Column("before_distance_m", REAL, nullable=True),
        sa.Column("after_x_m", REAL, nullable=True),
        sa.Column("after_y_m", REAL, nullable=True),
        sa.Column("after_heading_rad", REAL, nullable=True),
        sa.Column("after_distance_m", REAL, nullable=True),
        sa.Column("influence_left", REAL, nullable=False),
        sa.Column("influence_right", REAL, nullable=False),
        sa.Column("influence_width", REAL, nullable=False),
        sa.ForeignKeyConstraint(
            ["calibration_id"], ["calibrations.calibration_id"], name=op.f("fk_calibration_runs_calibration_id")
        ),
        sa.ForeignKeyConstraint(["run_id"], ["runs.run_id"], name=op.f("fk_calibration_runs_run_id")),
        sa.PrimaryKeyConstraint("calibration_id", "position", name=op.f("pk_calibration_runs")),
    )
    op.create_index(op.f("ix_calibration_runs_run_id"), "calibration_runs", ["run_id"], unique=False)
    op.create_table(
        "run_counts",
        sa.Column("run_id", sa.String(length=32), nullable=False),
        sa.Column("counts", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["run_id"], ["runs.run_id"], name=op.f("fk_run_counts_run_id")),
        sa.PrimaryKeyConstraint("run_id", name=op.f("pk_run_counts")),
    )
    op.create_table(
        "run_maps",
        sa.Column("run_id", sa.String(length=32), nullable=False),
        sa.Column("map", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["run_id"], ["runs.run_id"], name=op.f("fk_run_maps_run_id")),
        sa.PrimaryKeyConstraint("run_id", name=op.f("pk_run_maps")),
    )
    op.create_table(
        "run_states",
        sa.Column("sequence", WHOLE, autoincrement=True, nullable=False),
        sa.Column("run_id", sa.String(length=32), nullable=False),
        sa.Column("use", sa.String(length=16), nullable=False),
        sa.Column("reasons", sa.Text(), nullable=False),
        sa.Column("at", TIME, nullable=False),
        sa.Column("by", sa.String(length=200), nullable=False),
        sa.CheckConstraint("use IN ('usable', 'set aside')", name=op.f("ck_run_states_use")),
        sa.ForeignKeyConstraint(["run_id"], ["runs.run_id"], name=op.f("fk_run_states_run_id")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_run_states")),
    )
    op.create_index(op.f("ix_run_states_run_id_sequence"), "run_states", ["run_id", "sequence"], unique=False)


def downgrade() -> None:
    op.drop_index(op.f("ix_run_states_run_id_sequence"), table_name="run_states")
    op.drop_table("run_states")
    op.drop_table("run_maps")
    op.drop_table("run_counts")
    op.drop_index(op.f("ix_calibration_runs_run_id"), table_name="calibration_runs")
    op.drop_table("calibration_runs")
    op.drop_index(op.f("ix_runs_vehicle_id_started_at_sequence"), table_name="runs")
    op.drop_index(op.f("ix_runs_vehicle_id_ended_at"), table_name="runs")
    op.drop_table("runs")
    op.drop_table("issued_digests")
    op.drop_index(op.f("ix_in_force_vehicle_id_sequence"), table_name="in_force")
    op.drop_index(op.f("ix_in_force_calibration_id"), table_name="in_force")
    op.drop_table("in_force")
    op.drop_index(op.f("ix_evaluations_vehicle_id_as_of_sequence"), table_name="evaluations")
    op.drop_table("evaluations")
    op.drop_index(op.f("ix_calibration_standings_calibration_id_sequence"), table_name="calibration_standings")
    op.drop_table("calibration_standings")
    op.drop_index(op.f("ix_boots_vehicle_id_booted_at_sequence"), table_name="boots")
    op.drop_index(op.f("ix_boots_calibration_id"), table_name="boots")
    op.drop_table("boots")
    op.drop_table("boot_sheets")
    op.drop_index(op.f("ix_alert_events_alert_id_sequence"), table_name="alert_events")
    op.drop_table("alert_events")
    op.drop_table("vehicle_versions")
    op.drop_index(op.f("ix_maintenance_vehicle_id_done_at_sequence"), table_name="maintenance")
    op.drop_table("maintenance")
    op.drop_index(op.f("ix_keys_vehicle_id_sequence"), table_name="keys")
    op.drop_table("keys")
    op.drop_table("calibrations")
    op.drop_index(op.f("ix_alerts_vehicle_id_raised_at"), table_name="alerts")
    op.drop_index(op.f("ix_alerts_raised_at_sequence"), table_name="alerts")
    op.drop_index(
        "ix_alerts_one_open_a_cause",
        table_name="alerts",
        sqlite_where=sa.text("standing <> 'closed'"),
        postgresql_where=sa.text("standing <> 'closed'"),
    )
    op.drop_table("alerts")
    op.drop_table("vehicles")
    op.drop_table("people")
    op.drop_table("leases")
    op.drop_index(op.f("ix_journal_vehicle_id_entry"), table_name="journal")
    op.drop_table("journal")
