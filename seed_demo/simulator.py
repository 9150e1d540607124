"""Drive an invented vehicle over a course in steps of a millisecond and log it as its counters would.

The world is stepped, not solved: in each millisecond each side rolls a little, its ground distance is disturbed a
little, the heading turns by what the sides differ, and the vehicle moves *straight* along the heading of the middle of
the step. Nothing here knows of arcs, cumulative counts or closed forms, so that agreement with
:mod:`registry.numerics` means something.

Rolling disturbance: each side's ground distance in a step differs from what its counter counts by a normal deviate of
variance ``noise_m2_per_m`` times the distance rolled in it, independently from side to side and step to step [1]_.

References
----------
.. [1] Chong, K. S. and Kleeman, L., "Accurate odometry and error modelling for a mobile robot", Proc. IEEE
   International Conference on Robotics and Automation, 1997, pp. 2783-2788.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, pi
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from seed_demo.courses import Course, Leg

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

STEP_S = 0.001
STANDSTILL_S = 1.0


@dataclass(frozen=True)
class Truth:
    """What only the world knows: ground per tick of each side, turning width, disturbance, the measured mark."""

    left_m_per_tick: float
    right_m_per_tick: float
    width_m: float
    noise_m2_per_m: float = 0.0
    mark_ahead_m: float = 0.0
    mark_left_m: float = 0.0


@dataclass(frozen=True)
class Slip:
    """One side turns ``length_m`` further than it carries the vehicle, for half a second from ``share`` of the way."""

    share: float
    side: Literal["left", "right"]
    length_m: float


@dataclass(frozen=True)
class Motion:
    """What truly happened, at every step.

    ``time_s`` (n,), unrounded ``left_ticks`` and ``right_ticks`` (n,), and the path of the axle's middle ``x_m``,
    ``y_m``, ``heading_rad`` (n,) in the frame of its start.
    """

    time_s: FloatArray
    left_ticks: FloatArray
    right_ticks: FloatArray
    x_m: FloatArray
    y_m: FloatArray
    heading_rad: FloatArray


@dataclass(frozen=True)
class Log:
    """What the vehicle's logger wrote: ``time_s`` (n,) and counter readings (n,) from 0 to 2**bits - 1."""

    time_s: FloatArray
    left_counts: IntArray
    right_counts: IntArray


@dataclass(frozen=True)
class Logger:
    """How a vehicle logs: samples a second, largest lateness of one sample in steps, and the bits of its counters."""

    rate_hz: float = 20.0
    lateness_steps: int = 0
    counter_bits: int = 32


def leg_duration_s(leg: Leg, width_m: float, top_speed_m_per_s: float) -> float:
    """Time for a leg so that its faster side just reaches ``top_speed_m_per_s`` halfway, weaving aside."""
    return 2.0 * (abs(leg.length_m) + abs(leg.turn_rad) * width_m / 2.0) / top_speed_m_per_s


def _commanded(course: Course, width_m: float, top_speed_m_per_s: float) -> tuple[FloatArray, FloatArray]:
    """Advance (m) and turn (rad) in every step of the course, with a standstill before and after."""
    still = np.zeros(round(STANDSTILL_S / STEP_S))
    advances, turns = [still], [still]
    for leg in course.legs:
        n = max(2, ceil(leg_duration_s(leg, width_m, top_speed_m_per_s) / STEP_S))
        share = (np.arange(n) + 0.5) / n
        speed = (1.0 - np.cos(2.0 * pi * share)) / n
        weave = pi * leg.weaves * leg.weave_rad * np.sin(2.0 * pi * leg.weaves * share) / n
        advances.append(leg.length_m * speed)
        turns.append(leg.turn_rad * speed + weave)
    advances.append(still)
    turns.append(still)
    return np.concatenate(advances), np.concatenate(turns)


def _slipped(rolled_m: FloatArray, slip: Slip) -> FloatArray:
    """Extra distance turned by the slipping side in each step (m)."""
    extra = np.zeros_like(rolled_m)
    count = min(round(0.5 / STEP_S), rolled_m.size)
    first = min(int(slip.share * rolled_m.size), rolled_m.size - count)
    extra[first : first + count] = slip.length_m / count
    return extra


def move(
    course: Course,
    truth: Truth,
    top_speed_m_per_s: float,
    rng: np.random.Generator,
    slips: tuple[Slip, ...] = (),
) -> Motion:
    """Step the vehicle through the course.

    Parameters
    ----------
    course : Course
        Legs in ground lengths: the driver steers to the course, whatever the counters say.
    truth : Truth
        The vehicle as it really is today.
    top_speed_m_per_s : float
        Peak ground speed of the faster side.
    rng : numpy.random.Generator
        Source of the rolling disturbance.
    slips : tuple of Slip
        Where a side turns without carrying.

    Returns
    -------
    Motion
        At every step, the first at time zero.
    """
    advance_m, turn_rad = _commanded(course, truth.width_m, top_speed_m_per_s)
    half_m = turn_rad * (truth.width_m / 2.0)
    left_m, right_m = advance_m - half_m, advance_m + half_m
    left_ticks, right_ticks = left_m / truth.left_m_per_tick, right_m / truth.right_m_per_tick
    for slip in slips:
        if slip.side == "left":
            left_ticks = left_ticks + _slipped(left_m, slip) / truth.left_m_per_tick
        else:
            right_ticks = right_ticks + _slipped(right_m, slip) / truth.right_m_per_tick
    if truth.noise_m2_per_m > 0.0:
        left_m = left_m + np.sqrt(truth.noise_m2_per_m * np.abs(left_m)) * rng.standard_normal(left_m.size)
        right_m = right_m + np.sqrt(truth.noise_m2_per_m * np.abs(right_m)) * rng.standard_normal(right_m.size)
    turned = np.concatenate(([0.0], np.cumsum((right_m - left_m) / truth.width_m)))
    middle = 0.5 * (turned[1:] + turned[:-1])
    step_m = 0.5 * (left_m + right_m)
    zero = np.zeros(1)
    return Motion(
        time_s=np.arange(turned.size, dtype=np.float64) * STEP_S,
        left_ticks=np.concatenate((zero, np.cumsum(left_ticks))),
        right_ticks=np.concatenate((zero, np.cumsum(right_ticks))),
        x_m=np.concatenate((zero, np.cumsum(step_m * np.cos(middle)))),
        y_m=np.concatenate((zero, np.cumsum(step_m * np.sin(middle)))),
        heading_rad=turned,
    )


def mark_end(motion: Motion, truth: Truth) -> tuple[float, float, float]:
    """Where the measured mark on the chassis ends in the frame of its start: x (m), y (m), total turn (rad)."""
    total = float(motion.heading_rad[-1])
    arm = complex(truth.mark_ahead_m, truth.mark_left_m)
    end = complex(motion.x_m[-1], motion.y_m[-1]) + arm * complex(np.cos(total), np.sin(total)) - arm
    return end.real, end.imag, total


def log(motion: Motion, logger: Logger, rng: np.random.Generator) -> Log:
    """Sample the counters: whole ticks from an arbitrary start reading, wrapped at the counter's bits.

    Times are whole milliseconds from the first sample; a sample may be late by up to ``lateness_steps``.
    """
    every = round(1.0 / (logger.rate_hz * STEP_S))
    last = motion.time_s.size - 1
    index = np.arange(0, last, every)
    if logger.lateness_steps:
        index = index + rng.integers(0, logger.lateness_steps + 1, index.size)
        index[0] = 0
        index = index[index < last]
    index = np.append(index, last)
    size = 1 << logger.counter_bits
    readings = []
    for ticks in (motion.left_ticks, motion.right_ticks):
        start = int(rng.integers(0, size)) + float(rng.random())
        readings.append(np.floor(ticks[index] + start).astype(np.int64) % size)
    return Log(np.round(motion.time_s[index], 3), readings[0], readings[1])
