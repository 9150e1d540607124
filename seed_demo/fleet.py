"""What an invented vehicle is: its make, its own small differences, and the story that it lives through.

Moments of a story are shares of the whole history (0 is the first day, 1 today), so that a short demo tells the same
tale. Changes are relative: 0.01 on a side is one percent more ground per tick.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import pi, sin
from typing import Literal

import numpy as np

from registry.domain.alert import AlertKind
from registry.domain.maintenance import MaintenanceKind, Side
from registry.domain.vehicle import Drive
from seed_demo.simulator import Truth

Fault = Literal["spike", "reset", "no motion"]
Diet = Literal["mixed", "squares"]


@dataclass(frozen=True)
class Make:
    """What vehicles of one make share. ``ruler_*`` is what ruler and drawing say, the other figures are true.

    ``*_spread``: standard deviations, relative, by which load, surface and warmth move the truth from run to run.
    """

    word: str
    drive: Drive
    ruler_m_per_tick: float
    ruler_width_m: float
    m_per_tick: float
    width_m: float
    noise_m2_per_m: float
    scale_spread: float
    ratio_spread: float
    width_spread: float
    measuring_speed_m_per_s: float
    max_speed_m_per_s: float
    straight_m: float
    radius_m: float
    mark_ahead_m: float = 0.0
    mark_left_m: float = 0.0
    log_rate_hz: float = 20.0
    lateness_steps: int = 0


@dataclass(frozen=True)
class Change:
    """The truth moves by ``left``, ``right`` and ``width``, evenly from ``first`` to ``last`` (equal: at once)."""

    first: float
    last: float
    left: float = 0.0
    right: float = 0.0
    width: float = 0.0

    def done(self, share: float) -> float:
        """How much of the change has happened, 0 to 1."""
        if share < self.first:
            return 0.0
        return 1.0 if share >= self.last else (share - self.first) / (self.last - self.first)


@dataclass(frozen=True)
class Work:
    """Maintenance that is recorded. What it does to the vehicle is a :class:`Change` at the same moment."""

    share: float
    kind: MaintenanceKind
    side: Side | None
    note: str


@dataclass(frozen=True)
class WrongEntry:
    """Somebody types parameters with two digits exchanged; they are withdrawn ``days`` later."""

    share: float
    days: int


@dataclass(frozen=True)
class Story:
    """How a vehicle fares.

    ``sessions``: when twelve calibration runs are driven and a new baseline is adopted that afternoon.
    ``takes_evaluation_after_days``: the approver adopts what an evaluation proposes, so many days after.
    ``acknowledges``: kind of alert and the days until a person has seen it. ``deaf_from``: from then on the vehicle
    boots on what it has kept, whatever was adopted.
    """

    tale: str
    arrives: float = 0.0
    sessions: tuple[float, ...] = (0.0,)
    last_run: float = 1.0
    diet: Diet = "mixed"
    changes: tuple[Change, ...] = ()
    breathing: float = 0.0
    works: tuple[Work, ...] = ()
    wrong_entry: WrongEntry | None = None
    takes_evaluation_after_days: int | None = None
    acknowledges: dict[AlertKind, int] = field(default_factory=dict)
    deaf_from: float | None = None
    slips: tuple[float, ...] = ()
    faults: tuple[tuple[float, Fault], ...] = ()
    set_aside_by_hand: float | None = None


@dataclass(frozen=True)
class Vehicle:
    """One machine. ``place`` is its row in the whole register, and sets its days on the slab in any part of it."""

    place: int
    vehicle_id: str
    name: str
    serial: str
    site: str
    make: Make
    story: Story
    seed: int
    counter_bits: int = 32

    def birth(self) -> tuple[float, float, float]:
        """Relative differences of this vehicle (left, right, width) from its make, fixed by its seed."""
        rng = np.random.default_rng([self.seed, 0])
        scale, ratio, width = rng.normal(0.0, (0.004, 0.0015, 0.008))
        return float(scale - ratio / 2), float(scale + ratio / 2), float(width)

    def truth(self, share: float) -> Truth:
        """The vehicle as it is at ``share`` of the history, without the spread from run to run."""
        left, right, width = (1.0 + own for own in self.birth())
        for change in self.story.changes:
            done = change.done(share)
            left *= 1.0 + done * change.left
            right *= 1.0 + done * change.right
            width *= 1.0 + done * change.width
        season = 1.0 + self.story.breathing * sin(2 * pi * share)
        make = self.make
        return Truth(
            left_m_per_tick=make.m_per_tick * left * season,
            right_m_per_tick=make.m_per_tick * right * season,
            width_m=make.width_m * width,
            noise_m2_per_m=make.noise_m2_per_m,
            mark_ahead_m=make.mark_ahead_m,
            mark_left_m=make.mark_left_m,
        )
