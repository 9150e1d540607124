"""What a vehicle reports at boot, and what it is told to load."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal

BootSource = Literal["fetched", "kept", "carried", "built_in"]
Condition = Literal["good", "questioned", "provisional"]


@dataclass(frozen=True)
class BootStatement:
    """A vehicle's own report. Number or digest names the parameters it loaded."""

    calibration_number: int | None
    digest: str | None
    source: BootSource | None
    booted_at: datetime | None
    age_s: float | None
    software: str | None


@dataclass(frozen=True)
class Boot:
    """A boot on the record. ``calibration_id`` is what number or digest resolved to; ``matched`` whether that was in
    force.
    """

    boot_id: str
    vehicle_id: str
    statement: BootStatement
    booted_at: datetime
    calibration_id: str | None
    matched: bool
    recorded_at: datetime


@dataclass(frozen=True)
class BootSheet:
    """What a vehicle is to load, ready to serve: ``head`` is the lines that the digest covers."""

    vehicle_id: str
    calibration_id: str
    calibration_number: int
    head: str
    digest: str
    condition: Condition
    reasons: tuple[str, ...]
    answer: str
    """The JSON answer up to and without its closing ``,"tag":…}``."""
