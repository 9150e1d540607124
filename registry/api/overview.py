"""How a vehicle stands: open alerts, last evaluation, share of each tolerance used, what it drives on."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from registry.api import fields
from registry.api.bodies import Answer, Described
from registry.domain.boot import Boot, BootSource
from registry.domain.calibration import InForce
from registry.domain.evaluation import Evaluation, Finding
from registry.domain.tolerance import QUANTITIES
from registry.domain.vehicle import VehicleVersion
from registry.storage import alerts, boots, calibrations, evaluations
from registry.storage.engine import Connection


class LastEvaluationAnswer(Answer):
    """The last look at recent runs."""

    as_of: fields.Time
    finding: Finding
    message: str


class ToleranceUsedAnswer(Answer):
    """Deviation over tolerance in percent, per quantity; null where the runs cannot tell."""

    tick_factor: float | None
    side_ratio: float | None
    width: float | None


class InForceAnswer(Answer):
    """What is in force."""

    calibration_id: str
    calibration_number: int
    in_force_from: fields.Time


class DrivesOnAnswer(Answer):
    """What the vehicle drives on, by its last boot."""

    calibration_id: str | None
    calibration_number: int | None
    source: BootSource | None
    booted_at: fields.Time
    matched: bool


class OverviewAnswer(Answer):
    """How a vehicle stands."""

    open_alerts: int
    last_evaluation: LastEvaluationAnswer | None
    tolerance_used_percent: ToleranceUsedAnswer
    in_force: InForceAnswer | None
    drives_on: DrivesOnAnswer | None


@dataclass(frozen=True)
class _Standing:
    open_alerts: int
    evaluation: Evaluation | None
    in_force: InForce | None
    boot: Boot | None
    booted_number: int | None


def of_fleet(c: Connection, versions: Sequence[VehicleVersion]) -> dict[str, Described]:
    """
    The overview of several vehicles, with a fixed number of queries.

    Returns
    -------
    dict
        By vehicle_id.
    """
    counted = Counter(alert.vehicle_id for alert in alerts.all_open(c))
    evaluated = evaluations.latest_all(c)
    in_force = calibrations.all_in_force(c)
    booted = boots.latest_all(c)
    numbers = calibrations.numbers_of(c, {boot.calibration_id for boot in booted.values() if boot.calibration_id})
    return {
        version.vehicle_id: _described(
            version,
            _Standing(
                counted[version.vehicle_id],
                evaluated.get(version.vehicle_id),
                in_force.get(version.vehicle_id),
                booted.get(version.vehicle_id),
                _booted_number(booted.get(version.vehicle_id), numbers),
            ),
        )
        for version in versions
    }


def of_vehicle(c: Connection, version: VehicleVersion) -> Described:
    """The overview of one vehicle."""
    vehicle_id = version.vehicle_id
    boot = boots.latest(c, vehicle_id)
    numbers = calibrations.numbers_of(c, [boot.calibration_id]) if boot and boot.calibration_id else {}
    return _described(
        version,
        _Standing(
            len(alerts.open_for(c, vehicle_id)),
            evaluations.latest(c, vehicle_id),
            calibrations.in_force(c, vehicle_id),
            boot,
            _booted_number(boot, numbers),
        ),
    )


def _booted_number(boot: Boot | None, numbers: dict[str, int]) -> int | None:
    """The number of what a vehicle booted on: by what its statement turned out to mean, else as stated."""
    if boot is None:
        return None
    return boot.statement.calibration_number if boot.calibration_id is None else numbers[boot.calibration_id]


def _described(version: VehicleVersion, standing: _Standing) -> Described:
    evaluation, boot, in_force = standing.evaluation, standing.boot, standing.in_force
    return {
        "open_alerts": standing.open_alerts,
        "last_evaluation": evaluation
        and {
            "as_of": fields.instant(evaluation.as_of),
            "finding": evaluation.result.finding,
            "message": evaluation.result.message,
        },
        "tolerance_used_percent": _tolerance_used(version, evaluation),
        "in_force": _in_force(in_force),
        "drives_on": boot
        and {
            "calibration_id": boot.calibration_id,
            "calibration_number": standing.booted_number,
            "source": boot.statement.source,
            "booted_at": fields.instant(boot.booted_at),
            "matched": boot.matched,
        },
    }


def _tolerance_used(version: VehicleVersion, evaluation: Evaluation | None) -> Described:
    used: Described = dict.fromkeys(QUANTITIES)
    if evaluation is None:
        return used
    limits = version.statement.tolerance.as_tuple()
    for name, found, limit in zip(QUANTITIES, evaluation.result.quantities(), limits, strict=True):
        if found.deviation is not None:
            used[name] = fields.percent(abs(found.deviation) / limit)
    return used


def _in_force(entry: InForce | None) -> Described | None:
    if entry is None or entry.calibration_id is None:
        return None
    return {
        "calibration_id": entry.calibration_id,
        "calibration_number": entry.number,
        "in_force_from": fields.instant(entry.in_force_from),
    }
