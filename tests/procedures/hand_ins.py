"""Handing runs in, and seeing what became of it."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from registry.domain.run import Run
from registry.errors import Invalid
from registry.procedures.intake import RunStatement, take_run
from registry.procedures.registration import put_vehicle
from registry.storage import journal, runs
from registry.storage.journal import JournalFilter
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    VEHICLE,
    DrivenVehicle,
    sealed,
)


def everything_of(driven: DrivenVehicle) -> tuple[list[Run], int]:
    with driven.services.read() as c:
        entries = journal.page(c, JournalFilter(action="run recorded"), 1000, None)
        return list(runs.page(c, driven.vehicle_id, 1000, None).items), len(entries.items)


def pointers_of(refusal: Invalid) -> list[str]:
    return [error.pointer for error in refusal.errors]


def with_bits(driven: DrivenVehicle, vehicle_id: str, bits: int, **more: Any) -> None:
    put_vehicle(driven.services, APPROVER, vehicle_id, replace(STATEMENT, counter_bits=bits, **more))


def taken(driven: DrivenVehicle, statement: RunStatement, vehicle_id: str = VEHICLE) -> Run:
    run, _ = take_run(driven.services, TECHNICIAN, vehicle_id, sealed(statement))
    return run
