"""Work on a vehicle that can move its parameters, and which kinds of it end the window of comparable runs."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal, get_args

MaintenanceKind = Literal[
    "part_fitted",
    "sides_exchanged",
    "pressure_set",
    "track_tensioned",
    "encoder_exchanged",
    "controller_exchanged",
    "repaired",
    "collided",
    "towed",
    "other",
]
Side = Literal["left", "right", "both"]

MAINTENANCE_KINDS: tuple[MaintenanceKind, ...] = get_args(MaintenanceKind)

#: Runs before new tracks, tyres, encoders or geometry say nothing about the vehicle after. Pressure and tension move
#: the
#: effective rolling radius and the slip by more than a tolerance (practice figures: 0.1 to 0.5 %), so they end it too.
#: Towing turns counters without moving the parameters; a controller only carries numbers; `other` is judged by a
#: person.
ENDS_WINDOW: dict[MaintenanceKind, bool] = {
    "part_fitted": True,
    "sides_exchanged": True,
    "pressure_set": True,
    "track_tensioned": True,
    "encoder_exchanged": True,
    "controller_exchanged": False,
    "repaired": True,
    "collided": True,
    "towed": False,
    "other": False,
}

MAINTENANCE_WORDS: dict[MaintenanceKind, str] = {
    "part_fitted": "new track, tyre or wheel fitted",
    "sides_exchanged": "sides exchanged",
    "pressure_set": "tyre pressure set",
    "track_tensioned": "track tensioned",
    "encoder_exchanged": "encoder exchanged",
    "controller_exchanged": "controller exchanged",
    "repaired": "repaired",
    "collided": "collision",
    "towed": "towed",
    "other": "other work",
}


@dataclass(frozen=True)
class Maintenance:
    """One entry of work done."""

    maintenance_id: str
    vehicle_id: str
    done_at: datetime
    kind: MaintenanceKind
    side: Side | None
    note: str | None
    ends_window: bool
    recorded_at: datetime
    recorded_by: str
