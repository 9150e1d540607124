"""What must be said where a person puts parameters into force or sends a vehicle to drive calibration runs.

In our own words; the standards for driverless trucks, safety functions and risk assessment stand above them.
"""

from __future__ import annotations

ADOPTION_CAUTIONS: tuple[str, ...] = (
    (
        "These figures serve navigation. They are not a safety function: no speed limit, protective field or "
        "stopping distance may rely on them."
    ),
    (
        "Where the controller takes its speed from the same encoders, real speed and braking distance change with "
        "these values: the person responsible re-verifies them before the vehicle works again."
    ),
    "The vehicle drives on these values from its next boot, not from now.",
)

DRIVE_CAUTIONS: tuple[str, ...] = (
    (
        "Assess the risk first. Mark and clear a level area with room beyond the path: a vehicle on wrong parameters "
        "can end metres away."
    ),
    "A trained driver drives; a second person watches with the emergency stop in reach. Personnel detection stays on.",
    "Walking speed, gentle starts, no load or a secured and declared one.",
    "Stop and lock out before measuring at wheels or tracks: pinch points, hot brakes, tension stored in the tracks.",
    "Check tyre pressure or track tension cold, before the first run.",
    "On slip, an obstacle or a wheel over a joint, stop; set the run aside with the reason, do not delete it.",
)
