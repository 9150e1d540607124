"""Courses that the invented drivers drive: legs from rest to rest, each along a line, an arc or on the spot.

A leg's speed is a raised cosine, so that it starts and ends at rest without a jerk. A driver's hand shows as a *weave*:
the heading swings off the leg and comes back to it, a whole number of times.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import pi
from typing import Literal

Sense = Literal[1, -1]
"""Turning sense seen from above: 1 counter-clockwise (to the left), -1 clockwise."""


@dataclass(frozen=True)
class Leg:
    """One piece of a course from rest to rest.

    ``length_m`` is rolled by the axle's middle (negative: backwards) while the vehicle turns by ``turn_rad``;
    ``weave_rad`` is the widest swing of the heading, ``weaves`` how often it swings out and back.
    """

    length_m: float
    turn_rad: float = 0.0
    weave_rad: float = 0.0
    weaves: int = 0


@dataclass(frozen=True)
class Course:
    """Named legs. ``counted_turns``: the driver counts whole turns on it, so the closure can say how many."""

    name: str
    legs: tuple[Leg, ...]
    counted_turns: bool = False

    @property
    def turn_rad(self) -> float:
        return sum(leg.turn_rad for leg in self.legs)


def straight(length_m: float, weave_rad: float = 0.0) -> Course:
    """Along the measuring line."""
    return Course("straight", (Leg(length_m, 0.0, weave_rad, 2),))


def half_loop(length_m: float, radius_m: float, sense: Sense, weave_rad: float = 0.0) -> Course:
    """Out, half a circle, and back beside the way out."""
    word = "left" if sense > 0 else "right"
    out = Leg(length_m, 0.0, weave_rad, 1)
    return Course(f"half loop {word}", (out, Leg(pi * radius_m, sense * pi), out))


def square(side_m: float, sense: Sense, weave_rad: float = 0.0) -> Course:
    """Four sides with a turn on the spot after each: back on the start mark."""
    word = "left" if sense > 0 else "right"
    return Course(f"square {word}", (Leg(side_m, 0.0, weave_rad, 1), Leg(0.0, sense * pi / 2)) * 4)


def spin(turns: int, sense: Sense) -> Course:
    """Whole turns on the spot, counted."""
    word = "left" if sense > 0 else "right"
    return Course(f"spin {turns} turns {word}", (Leg(0.0, sense * 2 * pi * turns),), counted_turns=True)


def figure_of_eight(radius_m: float) -> Course:
    """A full circle to the left, a full circle to the right: back on the start mark."""
    ring = 2 * pi * radius_m
    return Course("figure of eight", (Leg(ring, 2 * pi), Leg(ring, -2 * pi)))


def traverse(length_m: float, bend_rad: float, weave_rad: float = 0.0) -> Course:
    """From one surveyed mark to another behind a bend and a bend back."""
    third = length_m / 3
    bend = Leg(third / 2, bend_rad)
    back = Leg(third / 2, -bend_rad)
    return Course("traverse", (Leg(third, 0.0, weave_rad, 1), bend, back, Leg(third, 0.0, weave_rad, 1)))
