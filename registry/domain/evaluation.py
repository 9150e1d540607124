"""An evaluation: one scheduled look at recent runs against the calibration in force."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal

from registry.domain.vehicle import Parameters

Finding = Literal["within", "uncertain", "beyond", "cannot_tell"]


@dataclass(frozen=True)
class QuantityFinding:
    """Deviation of one quantity from the calibration in force, relative. All None where these runs cannot tell."""

    deviation: float | None
    u: float | None
    observed: bool
    probability_beyond: float | None


@dataclass(frozen=True)
class EvaluationResult:
    """The content of an evaluation. ``fitted`` carries only what a chart may draw: see ``observed`` of each quantity.

    ``fitted_u_relative`` is of (left, right, width), relative.
    """

    against: str | None
    runs_used: int
    first_run_at: datetime | None
    last_run_at: datetime | None
    tick_factor: QuantityFinding
    side_ratio: QuantityFinding
    width: QuantityFinding
    fitted: Parameters | None
    fitted_u_relative: tuple[float, float, float] | None
    coverage_factor: float | None
    finding: Finding
    message: str

    def quantities(self) -> tuple[QuantityFinding, QuantityFinding, QuantityFinding]:
        return (self.tick_factor, self.side_ratio, self.width)


@dataclass(frozen=True)
class Evaluation:
    """An evaluation on the record. ``as_of`` is the pass's time; ``inputs`` identifies what it looked at."""

    evaluation_id: str
    vehicle_id: str
    as_of: datetime
    recorded_at: datetime
    result: EvaluationResult
    proposed_calibration_id: str | None
    inputs: str
