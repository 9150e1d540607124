"""A small yard of vehicles for the pages to show, lived through by the real procedures.

``tub-7`` has a past: two calibrations, evaluations that end beyond tolerance, an open proposal, maintenance, boots, a
run and an alert. ``tub-8`` is new. Evaluations are put on the record as they would come from a pass, so that each state
of a strip is there whatever the fit thinks.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np

from registry.domain.alert import Alert, AlertContent
from registry.domain.boot import BootStatement
from registry.domain.calibration import Calibration, CalibrationResult, Observed
from registry.domain.evaluation import Evaluation, EvaluationResult, QuantityFinding
from registry.domain.person import Actor
from registry.domain.run import ClosureStatement, Conditions, Run
from registry.domain.vehicle import Parameters, VehicleStatement
from registry.procedures import alerting, baseline, intake, people
from registry.procedures.adoption import adopt
from registry.procedures.boot import refresh_sheet, report_boot
from registry.procedures.intake import RunStatement
from registry.procedures.maintenance import record_maintenance
from registry.procedures.registration import put_vehicle
from registry.services import Services
from registry.storage import calibrations, evaluations
from tests.conftest import StandingClock

PASSWORD = "a long pass phrase"
ROLES = {"Rea": "reader", "Tove": "technician", "Abel": "approver", "Kim": "keeper"}
APPROVER = Actor("person", "Abel", "approver")
TECHNICIAN = Actor("person", "Tove", "technician")
KEEPER = Actor("local", "console")

VALUES = Parameters(0.000348, 0.0003483, 0.620)
U_M = (2e-8, 2e-8, 4e-4)


@dataclass(frozen=True)
class Yard:
    """What was made."""

    vehicle_id: str
    in_force: Calibration
    proposal: Calibration
    run: Run
    alert: Alert


def statement(name: str = "Ore tub 7") -> VehicleStatement:
    return VehicleStatement(
        name=name,
        drive="tracks",
        nominal=Parameters(0.000349, 0.000349, 0.6),
        max_speed_m_per_s=1.5,
        site="North drift",
    )


def finding(deviation: float, u: float, probability: float) -> QuantityFinding:
    return QuantityFinding(deviation, u, True, probability)


UNSEEN = QuantityFinding(None, None, False, None)


def evaluation(against: Calibration, number: int, as_of: datetime, recorded_at: datetime) -> Evaluation:
    """An evaluation of a vehicle whose tick factor wears by 0.02 % a step; now and then its runs cannot tell."""
    wear = -0.0002 * number
    seen = number % 7 != 3
    values = against.result.parameters
    fitted = Parameters(
        values.left_m_per_tick * (1 + wear), values.right_m_per_tick * (1 + wear + 0.0004), values.width_m * 1.002
    )
    result = EvaluationResult(
        against=against.calibration_id,
        runs_used=8 + number,
        first_run_at=as_of - timedelta(days=20),
        last_run_at=as_of - timedelta(hours=3),
        tick_factor=finding(wear, 0.0003, 0.99 if wear < -0.0055 else 0.01) if seen else UNSEEN,
        side_ratio=finding(0.0014 * math.sin(0.25 * number), 0.0002, 0.55 if number > 25 else 0.02) if seen else UNSEEN,
        width=finding(0.002, 0.003, 0.001) if number < 20 else UNSEEN,
        fitted=fitted,
        fitted_u_relative=(0.0003, 0.0003, 0.003),
        coverage_factor=2.05,
        finding="beyond" if wear < -0.0055 else "within",
        message="The tick factor is beyond tolerance." if wear < -0.0055 else "Within tolerance.",
    )
    return Evaluation(
        f"evaluation{number:02d}of{against.number}", against.vehicle_id, as_of, recorded_at, result, None, str(number)
    )


def straight(run_key: str, started_at: datetime, slip_ticks: int = 0) -> RunStatement:
    """A drive of about 10 m straight ahead with a gentle start, its end read against two marks."""
    time_s = np.arange(0.0, 20.0, 0.1)
    share = 0.5 * (1.0 - np.cos(np.pi * time_s / time_s[-1]))
    left = np.round(28700 * share).astype(np.int64)
    right = np.round((28680 + slip_ticks) * share).astype(np.int64)
    closure = ClosureStatement(9.9880, 0.0150, 0.002, None, None, 0.004, 0.003)
    conditions = Conditions(start_mark="A", end_mark="B", surface="concrete", driven_by="Tove", read_by="Rea")
    return RunStatement(
        run_key, started_at, time_s, left, right, closure, conditions, intake.content_digest({"k": run_key})
    )


def add_people(services: Services) -> None:
    for name, role in ROLES.items():
        people.add_person(services, KEEPER, name, role, PASSWORD)  # type: ignore[arg-type]  # a role of the table above


def furnish(services: Services, clock: StandingClock) -> Yard:
    """Let the yard live through its past; ends with the clock where it began."""
    end = clock.time
    clock.time = end - timedelta(days=100)
    add_people(services)
    put_vehicle(services, APPROVER, "tub-7", statement())
    put_vehicle(services, APPROVER, "tub-8", statement("Ore tub 8"))
    first = baseline.propose_entered(services, TECHNICIAN, "tub-7", "entered", VALUES, U_M, "from the maker's sheet")
    adopt(services, APPROVER, first.calibration_id, "first values")
    clock.move(days=40)
    record_maintenance(services, TECHNICIAN, "tub-7", clock(), "track_tensioned", "left", "two turns")
    clock.move(hours=2)
    worn = replace(VALUES, left_m_per_tick=VALUES.left_m_per_tick * 0.998)
    second = baseline.propose_entered(services, TECHNICIAN, "tub-7", "entered", worn, U_M, None)
    in_force = adopt(services, APPROVER, second.calibration_id, "after tensioning")
    with services.write() as c:
        for number in range(30):
            as_of = clock.move(days=1.9)
            evaluations.add(c, evaluation(in_force, number, as_of, as_of))
    run, _ = intake.take_run(services, TECHNICIAN, "tub-7", straight("hall-1", clock() - timedelta(hours=5)))
    content = AlertContent(
        "beyond_tolerance",
        "tick_factor",
        "Ore tub 7: the tick factor is 0.58 % below the calibration in force.",
        "The vehicle falls short 58 mm in 10 m.",
        "Drive calibration runs and propose a new baseline.",
        "medium",
        "this shift",
        size=-0.0058,
        u=0.0003,
        probability_beyond=0.99,
    )
    with services.write() as c:
        alert = alerting.raise_or_update(c, services, "tub-7", content, clock())
        refresh_sheet(c, "tub-7", clock())
        result = CalibrationResult(
            "evaluation", replace(worn, width_m=0.6212), ((4e-8, 1e-8, 0.0), (1e-8, 4e-8, 0.0), (0.0, 0.0, 2.5e-7)),
            Observed(tick_factor=True, side_ratio=True, width=False),
        )  # fmt: skip
        proposal = calibrations.add(
            c, services.new_id(), "tub-7", result, in_force.calibration_id, clock(), "schedule:pass"
        )
    report_boot(
        services,
        Actor("vehicle", "tub-7"),
        "tub-7",
        BootStatement(in_force.number, None, "fetched", clock() - timedelta(hours=6), 0.0, "9.2"),
    )
    clock.time = end
    return Yard("tub-7", in_force, proposal, run, alert)
