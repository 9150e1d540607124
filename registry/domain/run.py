"""A run: one logged drive with a known end, kept as it was handed in and never edited."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal

Use = Literal["usable", "set aside"]


@dataclass(frozen=True)
class ClosureStatement:
    """Where the run truly ended in the frame of its start pose, as read. `None` is: not measured.

    Lengths in metres, angles in radians. With ``turns`` (signed whole turns, counted) the total turn is
    ``2 pi turns + heading_rad``; without it headings are compared modulo a full turn.
    """

    x_m: float | None
    y_m: float | None
    heading_rad: float | None
    distance_m: float | None
    turns: int | None
    position_sd_m: float | None
    heading_sd_rad: float | None


@dataclass(frozen=True)
class Conditions:
    """What was noted about the drive, all optional."""

    start_mark: str | None = None
    end_mark: str | None = None
    course: str | None = None
    surface: str | None = None
    load_kg: float | None = None
    driven_by: str | None = None
    read_by: str | None = None
    instrument: str | None = None
    note: str | None = None


@dataclass(frozen=True)
class Misclosure:
    """Closure minus what the parameters predict, per measured component (metres, radians)."""

    x_m: float | None
    y_m: float | None
    heading_rad: float | None
    distance_m: float | None


@dataclass(frozen=True)
class Run:
    """A run as recorded. ``use`` and ``reasons`` are the latest of its states."""

    run_id: str
    vehicle_id: str
    run_key: str
    vehicle_version: int
    started_at: datetime
    ended_at: datetime
    duration_s: float
    samples: int
    distance_m: float
    turned_rad: float
    closure: ClosureStatement
    conditions: Conditions
    misclosure: Misclosure | None
    content_digest: str
    counts_digest: str
    use: Use
    reasons: tuple[str, ...]
    recorded_at: datetime
    recorded_by: str


@dataclass(frozen=True)
class RunState:
    """One entry in the history of what a run may be used for."""

    use: Use
    reasons: tuple[str, ...]
    at: datetime
    by: str
