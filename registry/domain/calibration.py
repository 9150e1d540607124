"""A calibration: parameters with covariance and origin. Append-only; it is superseded or withdrawn, never edited."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal

from registry.domain.run import Misclosure
from registry.domain.vehicle import Parameters

Kind = Literal["baseline", "entered", "provisional", "evaluation", "reinstated"]
Standing = Literal["proposed", "in force", "superseded", "withdrawn"]

Matrix3 = tuple[tuple[float, float, float], tuple[float, float, float], tuple[float, float, float]]


@dataclass(frozen=True)
class Observed:
    """Which of the watched quantities the runs determined."""

    tick_factor: bool
    side_ratio: bool
    width: bool

    def as_tuple(self) -> tuple[bool, bool, bool]:
        return (self.tick_factor, self.side_ratio, self.width)


@dataclass(frozen=True)
class CalibrationRun:
    """What one run contributed: its weight, its misclosure before and after, and its influence.

    ``influence`` is the relative change of (left, right, width) if this run were left out.
    """

    run_id: str
    weight: float
    before: Misclosure
    after: Misclosure
    influence: tuple[float, float, float]


@dataclass(frozen=True)
class CalibrationResult:
    """The content of a calibration before the record gives it a number.

    ``covariance_relative`` is of (left, right, width), each relative to its value, as a standard covariance: Student's
    factor for a 95 % interval is ``coverage_factor``. ``random_error_m_per_sqrt_m`` is the rolling noise of one side.
    """

    kind: Kind
    parameters: Parameters
    covariance_relative: Matrix3
    observed: Observed
    runs: tuple[CalibrationRun, ...] = ()
    birge_ratio: float | None = None
    coverage_factor: float = 1.959963984540054
    random_error_m_per_sqrt_m: float | None = None
    method_version: str = ""
    note: str | None = None


@dataclass(frozen=True)
class Calibration:
    """A calibration on the record. ``based_on`` is the calibration in force when it was proposed.

    ``reinstates`` names, for kind ``reinstated``, the calibration whose numbers it carries (the first in a chain).
    """

    calibration_id: str
    vehicle_id: str
    number: int
    result: CalibrationResult
    standing: Standing
    based_on: str | None
    in_force_from: datetime | None
    in_force_to: datetime | None
    recorded_at: datetime
    recorded_by: str
    reinstates: str | None = None


@dataclass(frozen=True)
class InForce:
    """One entry in the history of what a vehicle should drive on. ``calibration_id`` None: nothing in force from then
    on.
    """

    sequence: int
    vehicle_id: str
    calibration_id: str | None
    number: int | None
    in_force_from: datetime
    recorded_at: datetime
    recorded_by: str
    reason: str
    entered_late: bool
