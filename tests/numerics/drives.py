"""A stepped world for tests of the numerics: it moves straight in every small step, and knows no arc, no closed form.

A leg is an advance in metres and a turn in radians, both along a smooth profile. The driver steers to the ground, the
counters count what each side rolled by its true tick factor, cut to whole ticks; what the ground really passed differs
from that by a normal deviate of variance ``rolling_noise_m`` times the distance, in every step and on each side.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from registry.numerics.closure import Closures

Float = NDArray[np.float64]
Leg = tuple[float, float]

QUARTER = np.pi / 2
SPEED_M_PER_S = 0.5
TURN_RAD_PER_S = 0.6


@dataclass(frozen=True)
class Truth:
    """What only the world knows."""

    left_m_per_tick: float = 3.49e-4
    right_m_per_tick: float = 3.50e-4
    width_m: float = 0.62
    rolling_noise_m: float = 0.0
    lever_m: tuple[float, float] = (0.0, 0.0)

    @property
    def parameters(self) -> Float:
        return np.array([self.left_m_per_tick, self.right_m_per_tick, self.width_m])


@dataclass(frozen=True)
class Driven:
    """Increments per sample, as logged, and the true end (x, y, total turn) of the measured mark."""

    left_ticks: Float
    right_ticks: Float
    end: Float

    @property
    def ticks(self) -> tuple[Float, Float]:
        return self.left_ticks, self.right_ticks


def straight(length_m: float) -> list[Leg]:
    return [(length_m, 0.0)]


def square(side_m: float, sense: int) -> list[Leg]:
    return [(side_m, 0.0), (0.0, sense * QUARTER)] * 4


def round_square(side_m: float, radius_m: float, sense: int) -> list[Leg]:
    return [(side_m, 0.0), (radius_m * QUARTER, sense * QUARTER)] * 4


def half_loop(side_m: float, sense: int) -> list[Leg]:
    return [(side_m, 0.0), (0.0, sense * QUARTER), (side_m / 2, 0.0), (0.0, sense * QUARTER), (side_m, 0.0)]


def spin(turns: float) -> list[Leg]:
    return [(0.0, 2 * np.pi * turns)]


def eight(radius_m: float) -> list[Leg]:
    return [(2 * np.pi * radius_m, 2 * np.pi), (2 * np.pi * radius_m, -2 * np.pi)]


def traverse(first_m: float, turn_rad: float, second_m: float) -> list[Leg]:
    return [(first_m, 0.0), (0.0, turn_rad), (second_m, 0.0)]


def calibration_session() -> list[list[Leg]]:
    """Twelve runs: 3 straights, 4 loops in both senses, 2 counted spins, 3 traverses from mark to mark."""
    return [
        *[straight(10.0)] * 3,
        *[square(3.0, 1)] * 2,
        *[square(3.0, -1)] * 2,
        spin(3),
        spin(-3),
        traverse(4.0, 0.8, 5.0),
        traverse(3.0, -1.1, 6.0),
        [(5.0, 0.0), (2.0, 1.5), (4.0, 0.0)],
    ]


def drive(
    legs: Sequence[Leg], truth: Truth, rng: np.random.Generator, rate_hz: float = 20.0, steps_a_sample: int = 10
) -> Driven:
    """Step through the legs, ``steps_a_sample`` small straight steps for every logged sample."""
    lefts, rights = [], []
    for advance_m, turn_rad in legs:
        duration_s = max(abs(advance_m) / SPEED_M_PER_S, abs(turn_rad) / TURN_RAD_PER_S, 0.2)
        count = int(np.ceil(duration_s * rate_hz)) * steps_a_sample
        profile = 1.0 - np.cos(2 * np.pi * (np.arange(count) + 0.5) / count)
        profile = (0.5 * profile + 0.5) / count
        lefts.append((advance_m - turn_rad * truth.width_m / 2) * profile)
        rights.append((advance_m + turn_rad * truth.width_m / 2) * profile)
    counted = np.concatenate(lefts), np.concatenate(rights)
    rolled = [side + np.sqrt(truth.rolling_noise_m * np.abs(side)) * rng.standard_normal(side.size) for side in counted]
    end = _mark_end(rolled[0], rolled[1], truth)
    ticks = []
    for side, m_per_tick in zip(counted, (truth.left_m_per_tick, truth.right_m_per_tick), strict=True):
        readings = np.floor(np.cumsum(side)[steps_a_sample - 1 :: steps_a_sample] / m_per_tick + rng.uniform())
        ticks.append(np.diff(readings, prepend=0.0))
    return Driven(ticks[0], ticks[1], end)


def _mark_end(left_m: Float, right_m: Float, truth: Truth) -> Float:
    heading = np.concatenate([[0.0], np.cumsum((right_m - left_m) / truth.width_m)])
    # Forward along the heading in the middle of each step: a chord's excess of (turn of a step)^2 / 24, about 4e-7.
    steps = 0.5 * (left_m + right_m) * np.exp(0.5j * (heading[1:] + heading[:-1]))
    arm = complex(*truth.lever_m)
    end = complex(steps.sum()) + arm * complex(np.exp(1j * heading[-1])) - arm
    return np.array([end.real, end.imag, heading[-1]])


def read_ends(
    driven: Sequence[Driven],
    rng: np.random.Generator,
    position_sd_m: float = 0.005,
    heading_sd_rad: float = float(np.radians(0.23)),
    turns_counted: Sequence[bool] | None = None,
) -> Closures:
    """Closures as a person reads them, with honest scatter; headings within half a turn unless counted."""
    count = len(driven)
    counted = np.zeros(count, dtype=np.bool_) if turns_counted is None else np.array(turns_counted, dtype=np.bool_)
    sd = np.array([position_sd_m, position_sd_m, heading_sd_rad])
    poses = np.array([run.end for run in driven]) + sd * rng.standard_normal((count, 3))
    wrapped = np.angle(np.exp(1j * poses[:, 2]))
    poses[:, 2] = np.where(counted, poses[:, 2], wrapped)
    measured = np.concatenate([poses, np.zeros((count, 1))], axis=1)
    present = np.tile([True, True, True, False], (count, 1))
    variance = np.tile([*sd**2, 1.0], (count, 1))
    return Closures(measured, present, variance, counted)


def is_spin(legs: Sequence[Leg]) -> bool:
    return all(advance_m == 0.0 for advance_m, _ in legs)


@dataclass(frozen=True)
class Session:
    """A vehicle, its twelve runs and their ends."""

    truth: Truth
    driven: list[Driven]
    closures: Closures

    @property
    def counts(self) -> list[tuple[Float, Float]]:
        return [run.ticks for run in self.driven]

    @property
    def levers_m(self) -> Float:
        return np.tile(self.truth.lever_m, (len(self.driven), 1))


def session(
    seed: int,
    rolling_noise_m: float = 0.49e-6,
    rate_hz: float = 10.0,
    repeats: int = 1,
    spread: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Session:
    """An invented vehicle and its calibration runs.

    Parameters
    ----------
    seed : int
        Of everything random in it.
    rolling_noise_m : float
        Variance per metre rolled, by default (0.7 mm)^2 on a metre.
    rate_hz : float
        Samples a second. Both sides of a leg share one profile, so that its curvature is constant and thin sampling
        loses nothing.
    repeats : int
        How often the twelve runs are driven.
    spread : tuple of float
        Standard deviations of tick factor, side ratio and width from run to run, relative.
    """
    rng = np.random.default_rng(seed)
    truth = Truth(
        left_m_per_tick=3.5e-4 * (1 + 0.01 * float(rng.standard_normal())),
        right_m_per_tick=3.5e-4 * (1 + 0.01 * float(rng.standard_normal())),
        width_m=0.62 * float(rng.uniform(1.0, 1.6)),
        rolling_noise_m=rolling_noise_m,
    )
    courses = calibration_session() * repeats
    driven = []
    for legs in courses:
        scale, ratio, width = np.array(spread) * rng.standard_normal(3)
        today = Truth(
            truth.left_m_per_tick * (1 + scale - ratio / 2),
            truth.right_m_per_tick * (1 + scale + ratio / 2),
            truth.width_m * (1 + width),
            rolling_noise_m,
        )
        driven.append(drive(legs, today, rng, rate_hz))
    closures = read_ends(driven, rng, turns_counted=[is_spin(legs) for legs in courses])
    return Session(truth, driven, closures)
