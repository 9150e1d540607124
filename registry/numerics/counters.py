"""From counter readings to signed increments, and what to suspect when an increment is impossible.

A counter of b bits wraps modulo 2^b in either direction. The signed increment between two readings is the
representative of their difference nearest to zero; it is right as long as a side rolls less than half the counter's
range between two samples, whatever the sampling.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np

from registry.numerics.arrays import Bool, Float, Int

Side = Literal["left", "right"]

#: Widths of hardware counters that a log of another stated width may really come from.
_COMMON_BITS = (8, 10, 12, 16, 20, 24, 32)
#: A reading below this share of the counter's range right after a jump looks like a counter started again.
_RESET_SHARE = 0.01


@dataclass(frozen=True)
class ImpossibleStep:
    """The first sample at which a side would have rolled faster than it can.

    Attributes
    ----------
    sample : int
        Index of the reading after the step, counted from 0.
    speed_m_per_s : float
        What the step would mean.
    """

    side: Side
    sample: int
    speed_m_per_s: float


@dataclass(frozen=True)
class Reading:
    """Another way to read the same counts: what it is called, and the increments it gives."""

    guess: str
    left_ticks: Float
    right_ticks: Float


def increments(readings: Int, bits: int) -> Float:
    """Signed ticks (n - 1,) between readings (n,) of a counter that wraps at ``bits``.

    Raises
    ------
    ValueError
        When bits is not between 1 and 62.
    """
    if not 1 <= bits <= 62:
        raise ValueError("a counter has between 1 and 62 bits")
    half = np.int64(1) << np.int64(bits - 1)
    mask = (np.int64(1) << np.int64(bits)) - np.int64(1)
    return np.asarray((((np.diff(readings) + half) & mask) - half).astype(np.float64))


def impossible_steps(ticks: Float, time_s: Float, m_per_tick: float, max_speed_m_per_s: float) -> Bool:
    """Which steps (n - 1,) of one side are faster than it can roll; one tick is allowed beside the speed."""
    return np.asarray(np.maximum(np.abs(ticks) - 1.0, 0.0) * m_per_tick > max_speed_m_per_s * np.diff(time_s))


def first_impossible_step(
    left_ticks: Float, right_ticks: Float, time_s: Float, m_per_tick: tuple[float, float], max_speed_m_per_s: float
) -> ImpossibleStep | None:
    """The earliest step, of either side, that is faster than the vehicle can roll.

    Parameters
    ----------
    left_ticks, right_ticks : (n - 1,) float
        Increments.
    time_s : (n,) float
        Strictly increasing.
    m_per_tick : (float, float)
        Left and right.
    max_speed_m_per_s : float
        Of one side.

    Notes
    -----
    One tick is allowed beside the speed: two readings a millisecond apart may see an edge each.
    """
    interval = np.diff(time_s)
    found: list[ImpossibleStep] = []
    for side, ticks, factor in (("left", left_ticks, m_per_tick[0]), ("right", right_ticks, m_per_tick[1])):
        beyond = impossible_steps(ticks, time_s, factor, max_speed_m_per_s)
        if beyond.any():
            index = int(np.argmax(beyond))
            speed = abs(float(ticks[index])) * factor / float(interval[index])
            found.append(ImpossibleStep("left" if side == "left" else "right", index + 1, speed))
    return min(found, key=lambda step: step.sample, default=None)


def other_readings(left: Int, right: Int, bits: int, impossible: tuple[Bool, Bool]) -> Iterator[Reading]:
    """Mistakes that are made in practice, each with the increments it would give: the likeliest first.

    Parameters
    ----------
    left, right : (n,) int
        Counter readings as logged.
    bits : int
        Width of the counter as stated.
    impossible : (n - 1,) bool, twice
        Which steps of the left and of the right side are too fast, see `impossible_steps`.
    """
    a, b = increments(left, bits), increments(right, bits)
    for width in _COMMON_BITS:
        if width < bits and max(int(left.max()), int(right.max())) < 1 << width:
            yield Reading(f"counter of {width} bits, not {bits}", increments(left, width), increments(right, width))
    started = _without_resets(left, a, bits, impossible[0]), _without_resets(right, b, bits, impossible[1])
    yield Reading("counter started again from zero", *started)
    yield Reading("left side counted backwards", -a, b)
    yield Reading("right side counted backwards", a, -b)
    yield Reading("sides exchanged", b, a)
    yield Reading("sides exchanged and both counted backwards", -b, -a)
    for factor, words in (
        (0.5, "two counts for one"),
        (0.25, "four counts for one"),
        (2.0, "half the counts"),
        (4.0, "a quarter of the counts"),
    ):
        yield Reading(f"{words} on both sides", a * factor, b * factor)
        yield Reading(f"{words} on the left side", a * factor, b)
        yield Reading(f"{words} on the right side", a, b * factor)


def _without_resets(readings: Int, ticks: Float, bits: int, impossible: Bool) -> Float:
    """Increments with those steps taken as zero that end near zero and cannot be, or dwarf the steps around them.

    A counter that starts again early in a log has not come far: its step back is too fast, but not yet enormous.
    """
    usual = float(np.median(np.abs(ticks[ticks != 0]))) if np.any(ticks) else 0.0
    near_zero = readings[1:] < max(4.0 * usual, 2.0)
    near_zero &= readings[1:] < _RESET_SHARE * float(1 << bits) + 4.0 * usual
    return np.where(near_zero & (impossible | (np.abs(ticks) > 20.0 * max(usual, 1.0))), 0.0, ticks)
