"""A differentially steered vehicle, as it stands in the register, with dated versions of what re-interprets a log."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass, field
from datetime import datetime
from typing import Literal

from registry.domain.tolerance import Tolerance

Drive = Literal["tracks", "wheels"]


@dataclass(frozen=True)
class Parameters:
    """What turns counts into a path: metres rolled per tick on each side, and the effective width in metres."""

    left_m_per_tick: float
    right_m_per_tick: float
    width_m: float

    def as_tuple(self) -> tuple[float, float, float]:
        return (self.left_m_per_tick, self.right_m_per_tick, self.width_m)

    @property
    def tick_factor_m_per_tick(self) -> float:
        return 0.5 * (self.left_m_per_tick + self.right_m_per_tick)

    @property
    def side_ratio(self) -> float:
        """Right tick factor over left, minus one."""
        return self.right_m_per_tick / self.left_m_per_tick - 1.0


@dataclass(frozen=True)
class ReferencePoint:
    """The mark on the chassis that is measured, from the middle of the axle."""

    ahead_m: float = 0.0
    left_m: float = 0.0


@dataclass(frozen=True)
class VehicleStatement:
    """What a person states about a vehicle: the content of one version."""

    name: str
    drive: Drive
    nominal: Parameters
    max_speed_m_per_s: float
    site: str | None = None
    serial: str | None = None
    counter_bits: int = 32
    reference_point: ReferencePoint = field(default_factory=ReferencePoint)
    tolerance: Tolerance = field(default_factory=Tolerance)

    def etag(self) -> str:
        """Identity of the content: equal statements answer the same tag."""
        canonical = json.dumps(asdict(self), sort_keys=True, separators=(",", ":"))
        return hashlib.sha256(canonical.encode()).hexdigest()[:32]


@dataclass(frozen=True)
class VehicleVersion:
    """One dated version of a vehicle. The first version holds for all time before it too."""

    vehicle_id: str
    version: int
    statement: VehicleStatement
    valid_from: datetime | None
    recorded_at: datetime
    recorded_by: str

    def counting(self) -> dict[str, str | int | float | bool]:
        """The counting set-up as the flat record a vehicle is given at boot."""
        return {"bits": self.statement.counter_bits}
