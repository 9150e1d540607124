"""How a vehicle stands, as pages show it: what to do next, its three strips, what it drives on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from registry.domain.alert import Alert
from registry.domain.calibration import InForce
from registry.domain.evaluation import Evaluation, EvaluationResult
from registry.domain.maintenance import Maintenance
from registry.domain.next_step import NextStep, next_step
from registry.domain.tolerance import QUANTITIES, Tolerance
from registry.domain.vehicle import VehicleVersion
from registry.procedures import boot
from registry.storage import alerts, boots, calibrations, evaluations, vehicles
from registry.storage.engine import Connection
from registry.storage.in_force import parameters_in_force
from registry.web.figures import day, without_name
from registry.web.strips import TRAIL_LENGTH, Gauge, Strip, make_strip

#: Of a 95 % interval where an evaluation names none of its own.
NORMAL_COVERAGE = 1.959963984540054


@dataclass(frozen=True)
class Standing:
    """One vehicle at one moment. ``in_force`` is None, or names a calibration."""

    version: VehicleVersion
    in_force: InForce | None
    condition: str | None
    step: NextStep
    strips: tuple[Strip, ...]

    @property
    def vehicle_id(self) -> str:
        return self.version.vehicle_id

    @property
    def why(self) -> str:
        """Why there is something to do; the page has named the vehicle already."""
        return without_name(self.step.why, self.version.statement.name)

    @property
    def drives_on_words(self) -> str:
        """What it is to drive on, since when, and how far that may be trusted."""
        if self.in_force is None:
            return "Nothing in force."
        trust = "" if self.condition in (None, "good") else f", {self.condition}"
        return f"Calibration {self.in_force.number} since {day(self.in_force.in_force_from)}{trust}."


def strips_of(
    tolerance: Tolerance,
    width_m: float,
    in_force: InForce | None,
    recent: Sequence[Evaluation],
    work: Maintenance | None = None,
) -> tuple[Strip, ...]:
    """The three strips of a vehicle.

    Parameters
    ----------
    recent
        Its last evaluations, newest first. Only those against the calibration in force are shown: what was said
        against another one is no statement about this one.
    work
        Maintenance that ended the window since: what was said before it is left out too.
    """
    same = [
        one
        for one in recent
        if in_force is not None
        and one.result.against == in_force.calibration_id
        and (work is None or one.as_of >= work.done_at)
    ]
    # The latest evaluation may be of before the adoption: then this calibration has not been looked at yet.
    current = same[0] if same and same[0] is recent[0] else None
    coverage = (current.result.coverage_factor if current is not None else None) or NORMAL_COVERAGE
    strips = []
    for index, (quantity, limit) in enumerate(zip(QUANTITIES, tolerance.as_tuple(), strict=True)):
        findings = [one.result.quantities()[index] for one in same]
        earlier = [finding.deviation if finding.observed else None for finding in findings[1 : TRAIL_LENGTH + 1]]
        gauge = Gauge(quantity, limit, width_m, coverage)
        strips.append(make_strip(gauge, findings[0] if current is not None else None, earlier))
    return tuple(strips)


def _held(entry: InForce | None) -> InForce | None:
    return entry if entry is not None and entry.calibration_id is not None else None


def _latest(recent: Sequence[Evaluation], held: InForce | None) -> EvaluationResult | None:
    """What the last evaluation found, if it was against what is in force."""
    if not recent or held is None or recent[0].result.against != held.calibration_id:
        return None
    return recent[0].result


def of_fleet(c: Connection) -> list[Standing]:
    """Every vehicle, by identity."""
    open_alerts: dict[str, list[Alert]] = {}
    for alert in alerts.all_open(c):
        open_alerts.setdefault(alert.vehicle_id or "", []).append(alert)
    in_force, parameters = calibrations.all_in_force(c), parameters_in_force(c)
    recent, sheets = evaluations.recent_all(c, TRAIL_LENGTH + 1), boots.all_sheets(c)
    proposed = calibrations.all_open_proposals(c)
    standings = []
    for version in vehicles.all_current(c):
        vehicle_id, statement = version.vehicle_id, version.statement
        held, sheet = _held(in_force.get(vehicle_id)), sheets.get(vehicle_id)
        questioned = sheet is not None and sheet.condition == "questioned"
        work = boot.awaiting(c, vehicle_id) if questioned else None
        step = next_step(
            open_alerts.get(vehicle_id, ()),
            proposed.get(vehicle_id, ()),
            None if held is None or sheet is None else sheet.condition,
            work,
            _latest(recent.get(vehicle_id, ()), held),
        )
        width_m = parameters.get(vehicle_id, statement.nominal).width_m
        strips = strips_of(statement.tolerance, width_m, held, recent.get(vehicle_id, ()), work)
        standings.append(Standing(version, held, None if sheet is None else sheet.condition, step, strips))
    return standings


def of_vehicle(c: Connection, version: VehicleVersion, now: datetime) -> Standing:
    """One vehicle."""
    vehicle_id, statement = version.vehicle_id, version.statement
    held, sheet = _held(calibrations.in_force(c, vehicle_id, now)), boots.sheet(c, vehicle_id)
    work = boot.awaiting(c, vehicle_id)
    recent = evaluations.page(c, vehicle_id, TRAIL_LENGTH + 1, None).items
    step = next_step(
        alerts.open_for(c, vehicle_id),
        calibrations.open_proposals(c, vehicle_id),
        None if held is None or sheet is None else sheet.condition,
        work,
        _latest(recent, held),
    )
    width_m = statement.nominal.width_m
    if held is not None and held.calibration_id is not None:
        width_m = calibrations.by_id(c, held.calibration_id).result.parameters.width_m
    strips = strips_of(statement.tolerance, width_m, held, recent, work)
    return Standing(version, held, None if sheet is None else sheet.condition, step, strips)
