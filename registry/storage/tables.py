"""The tables. History is append-only: what changes is a new row, and the latest row of a history is what holds.

Three things are kept beside their history because they are asked at every boot or page, and are written in the same
transaction as what moves them: an alert's standing and latest content, the boot sheet, and the lease.
"""

from __future__ import annotations

from registry.storage.calibration_tables import (
    calibration_runs,
    calibration_standings,
    calibrations,
    evaluations,
    in_force,
    run_counts,
    run_maps,
    run_states,
    runs,
    vehicle_versions,
    vehicles,
)
from registry.storage.table_parts import metadata
from registry.storage.watch_tables import (
    alert_events,
    alerts,
    boot_sheets,
    boots,
    issued_digests,
    journal,
    keys,
    leases,
    maintenance,
    people,
)

__all__ = [
    "alert_events",
    "alerts",
    "boot_sheets",
    "boots",
    "calibration_runs",
    "calibration_standings",
    "calibrations",
    "evaluations",
    "in_force",
    "issued_digests",
    "journal",
    "keys",
    "leases",
    "maintenance",
    "metadata",
    "people",
    "run_counts",
    "run_maps",
    "run_states",
    "runs",
    "vehicle_versions",
    "vehicles",
]
