"""Looking at a vehicle as a pass does, and at what the record says afterwards."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import datetime

from registry.domain.alert import Alert
from registry.domain.boot import BootStatement
from registry.domain.calibration import Calibration
from registry.domain.evaluation import Evaluation
from registry.domain.person import Actor
from registry.domain.vehicle import Parameters
from registry.procedures import upkeep
from registry.procedures.baseline import propose_entered
from registry.procedures.boot_report import report_boot
from registry.procedures.evaluation import evaluate_vehicle
from registry.storage import alerts, boots, calibrations, evaluations, in_force
from tests.numerics.drives import Truth
from tests.procedures.drives_on_record import (
    TECHNICIAN,
    TRUTH,
    DrivenVehicle,
)

MakeCalibrated = Callable[..., DrivenVehicle]


def look(driven: DrivenVehicle, as_of: datetime | None = None) -> Evaluation | None:
    return evaluate_vehicle(driven.services, driven.vehicle_id, driven.clock() if as_of is None else as_of)


def found(driven: DrivenVehicle, as_of: datetime | None = None) -> Evaluation:
    evaluation = look(driven, as_of)
    assert evaluation is not None
    return evaluation


def history(driven: DrivenVehicle) -> list[Evaluation]:
    with driven.services.read() as c:
        return evaluations.history(c, driven.vehicle_id)


def open_alerts(driven: DrivenVehicle) -> dict[str, Alert]:
    """By cause, those that have returned too."""
    with driven.services.read() as c:
        return {one.content.cause(): one for one in alerts.open_for(c, driven.vehicle_id)}


def standing(driven: DrivenVehicle) -> set[str]:
    """Causes that are said to hold."""
    return {cause for cause, one in open_alerts(driven).items() if one.standing != "returned"}


def all_alerts(driven: DrivenVehicle) -> list[Alert]:
    with driven.services.read() as c:
        return list(alerts.page(c, "all", driven.vehicle_id, 1000, None).items)


def proposed(driven: DrivenVehicle) -> list[Calibration]:
    with driven.services.read() as c:
        return calibrations.open_proposals(c, driven.vehicle_id)


def held(driven: DrivenVehicle) -> Calibration:
    with driven.services.read() as c:
        entry = in_force.in_force(c, driven.vehicle_id)
        assert entry is not None
        assert entry.calibration_id is not None
        return calibrations.by_id(c, entry.calibration_id)


def condition(driven: DrivenVehicle) -> str:
    """What the vehicle is told at boot; the kept sheet is what the record says."""
    assert upkeep.check(driven.services) == []
    with driven.services.read() as c:
        sheet = boots.sheet(c, driven.vehicle_id)
    return "nothing" if sheet is None else sheet.condition


def until_raised(driven: DrivenVehicle, most: int) -> int:
    """Drive ordinary runs, one pass after each, until an alert on a deviation stands; how many it took."""
    for number in range(1, most + 1):
        driven.work(1)
        look(driven)
        if any(cause.startswith("beyond") for cause in standing(driven)):
            return number
    raise AssertionError(f"nothing was raised within {most} runs")


def boot_on(driven: DrivenVehicle, number: int) -> None:
    statement = BootStatement(number, None, "fetched", None, None, None)
    report_boot(driven.services, Actor("vehicle", driven.vehicle_id), driven.vehicle_id, statement)


def enter(driven: DrivenVehicle, kind: str = "entered", u: float = 2e-4) -> Calibration:
    """Put the truth into force by hand, as known to a relative uncertainty."""
    values = Parameters(*(float(value) for value in driven.truth.parameters))
    left, right, width = (u * value for value in values.as_tuple())
    made = propose_entered(driven.services, TECHNICIAN, driven.vehicle_id, kind, values, (left, right, width), None)  # type: ignore[arg-type]  # the tests name kinds only
    return driven.put_in_force(made)


def replace_sides(change: float) -> Truth:
    return replace(
        TRUTH,
        left_m_per_tick=TRUTH.left_m_per_tick * (1 + change),
        right_m_per_tick=TRUTH.right_m_per_tick * (1 + change),
    )
