"""The demo's world against closed forms, an adaptive integrator, and the published covariance of a straight drive."""

from __future__ import annotations

from math import cos, pi, sin, tau

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from seed_demo.courses import Course, Leg, figure_of_eight, half_loop, spin, square, straight, traverse
from seed_demo.simulator import STANDSTILL_S, FloatArray, Logger, Slip, Truth, leg_duration_s, log, mark_end, move

QUIET = Truth(left_m_per_tick=3.4e-4, right_m_per_tick=3.412e-4, width_m=0.62)


def _rng() -> np.random.Generator:
    return np.random.default_rng(20)


def test_a_straight_drive_ends_at_its_length_and_counts_length_over_tick_factor() -> None:
    motion = move(straight(18.0), QUIET, 1.1, _rng())
    x, y, turn = mark_end(motion, QUIET)
    # A raised cosine summed over its whole period is exact, so only rounding is left.
    assert x == pytest.approx(18.0, abs=1e-9)
    assert y == pytest.approx(0.0, abs=1e-9)
    assert turn == pytest.approx(0.0, abs=1e-9)
    assert motion.left_ticks[-1] == pytest.approx(18.0 / 3.4e-4, rel=1e-12)
    assert motion.right_ticks[-1] == pytest.approx(18.0 / 3.412e-4, rel=1e-12)


def test_counted_turns_on_the_spot_roll_half_the_width_times_the_turn_on_each_side() -> None:
    motion = move(spin(5, -1), QUIET, 0.8, _rng())
    x, y, turn = mark_end(motion, QUIET)
    assert turn == pytest.approx(-5 * tau, rel=1e-12)
    assert (x, y) == pytest.approx((0.0, 0.0), abs=1e-12)
    assert motion.left_ticks[-1] == pytest.approx(5 * tau * 0.31 / 3.4e-4, rel=1e-12)
    assert motion.right_ticks[-1] == pytest.approx(-5 * tau * 0.31 / 3.412e-4, rel=1e-12)


@pytest.mark.parametrize("turn", [pi / 3, -pi, 1.9 * pi])
def test_an_arc_ends_where_its_circle_says(turn: float) -> None:
    radius = 2.4
    motion = move(Course("arc", (Leg(radius * abs(turn), turn),)), QUIET, 1.0, _rng())
    x, y, total = mark_end(motion, QUIET)
    assert total == pytest.approx(turn, rel=1e-12)
    # A straight step along the middle heading exceeds its chord by (turn of a step)^2 / 24: below 1e-7 here.
    assert x == pytest.approx(radius * sin(abs(turn)), abs=1e-6)
    assert y == pytest.approx(np.sign(turn) * radius * (1 - cos(turn)), abs=1e-6)


@pytest.mark.parametrize("course", [square(5.0, 1), square(5.0, -1), figure_of_eight(2.0)])
def test_closed_courses_return_to_their_start(course: Course) -> None:
    x, y, turn = mark_end(move(course, QUIET, 1.0, _rng()), QUIET)
    assert (x, y) == pytest.approx((0.0, 0.0), abs=1e-6)
    assert turn == pytest.approx(course.turn_rad, abs=1e-9)


@pytest.mark.parametrize(
    "course", [half_loop(8.0, 2.0, 1, 0.05), half_loop(8.0, 2.0, -1, 0.05), traverse(20.0, 0.7, 0.04)]
)
def test_woven_courses_agree_with_an_adaptive_integrator(course: Course) -> None:
    top, width = 1.0, QUIET.width_m
    x, y, heading = 0.0, 0.0, 0.0
    for leg in course.legs:
        duration = leg_duration_s(leg, width, top)

        def rates(t: float, state: FloatArray, leg: Leg = leg, duration: float = duration) -> list[float]:
            speed = leg.length_m / duration * (1 - cos(tau * t / duration))
            turning = leg.turn_rad / duration * (1 - cos(tau * t / duration))
            turning += leg.weave_rad / 2 * tau * leg.weaves / duration * sin(tau * leg.weaves * t / duration)
            return [speed * cos(state[2]), speed * sin(state[2]), turning]

        solved = solve_ivp(rates, (0.0, duration), np.array([x, y, heading]), "DOP853", rtol=1e-11, atol=1e-12)
        x, y, heading = (float(v) for v in solved.y[:, -1])
    mark = mark_end(move(course, QUIET, top, _rng()), QUIET)
    # The stepped world rounds each leg up to whole milliseconds and steps straight: a micrometre is far above both.
    assert mark == pytest.approx((x, y, heading), abs=1e-6)


def test_a_measured_mark_off_the_axle_swings_round_on_a_turn_on_the_spot() -> None:
    truth = Truth(3.4e-4, 3.4e-4, 0.62, mark_ahead_m=0.5, mark_left_m=-0.2)
    half_turn = Course("half turn", (Leg(0.0, pi),))
    x, y, turn = mark_end(move(half_turn, truth, 0.8, _rng()), truth)
    assert (x, y, turn) == pytest.approx((-1.0, 0.4, pi), abs=1e-9)


def test_rolling_disturbance_on_a_straight_has_the_published_covariance() -> None:
    """Chong & Kleeman (1997): q D / 2 along, 2 q D / W^2 in heading, 2 q D^3 / (3 W^2) across, q D^2 / W^2 for both."""
    q, distance, width, count = 2.0e-6, 6.0, 0.7, 3000
    truth = Truth(4.0e-4, 4.0e-4, width, noise_m2_per_m=q)
    rng = np.random.default_rng(97)
    ends = np.array([mark_end(move(straight(distance), truth, 12.0, rng), truth) for _ in range(count)])
    measured = np.cov(ends.T)
    expected_var = np.array([q * distance / 2, 2 * q * distance**3 / (3 * width**2), 2 * q * distance / width**2])
    # A sample variance of 3,000 scatters by sqrt(2/3000) = 2.6 %; five of those.
    assert np.diag(measured) == pytest.approx(expected_var, rel=0.13)
    assert measured[1, 2] == pytest.approx(q * distance**2 / width**2, rel=0.13)
    spread = np.sqrt(expected_var)
    assert abs(measured[0, 2]) / (spread[0] * spread[2]) < 5 / np.sqrt(count)
    assert np.abs(ends.mean(axis=0) - (distance, 0.0, 0.0)) == pytest.approx(
        0.0, abs=float(5 * spread[1] / np.sqrt(count))
    )


def test_a_slip_is_counted_by_its_side_and_moves_nothing() -> None:
    plain = move(straight(10.0), QUIET, 1.0, _rng())
    slipped = move(straight(10.0), QUIET, 1.0, _rng(), (Slip(0.4, "right", 0.06),))
    assert np.array_equal(slipped.x_m, plain.x_m)
    assert np.array_equal(slipped.left_ticks, plain.left_ticks)
    assert slipped.right_ticks[-1] - plain.right_ticks[-1] == pytest.approx(0.06 / QUIET.right_m_per_tick, rel=1e-9)


@pytest.mark.parametrize("bits", [12, 16, 32])
def test_counter_readings_wrap_at_their_bits_and_unwrap_to_the_ticks_driven(bits: int) -> None:
    motion = move(straight(24.0), QUIET, 1.0, _rng())
    written = log(motion, Logger(rate_hz=25.0, lateness_steps=3, counter_bits=bits), np.random.default_rng(bits))
    size = 1 << bits
    for readings, ticks in ((written.left_counts, motion.left_ticks), (written.right_counts, motion.right_ticks)):
        assert readings.min() >= 0
        assert readings.max() < size
        steps = (np.diff(readings) + size // 2) % size - size // 2
        # Two readings, each cut to a whole tick.
        assert abs(int(steps.sum()) - ticks[-1]) < 1.0
    wraps = int(np.sum(np.abs(np.diff(written.left_counts)) > size // 2))
    assert wraps >= motion.left_ticks[-1] // size
    assert np.all(np.diff(written.time_s) > 0)
    assert written.time_s[0] == 0.0
    assert written.time_s[-1] == pytest.approx(motion.time_s[-1], abs=5e-4)


def test_a_log_starts_and_ends_at_standstill() -> None:
    motion = move(straight(5.0), QUIET, 1.0, _rng())
    still = round(STANDSTILL_S / 0.001)
    assert motion.x_m[still] == 0.0
    assert motion.x_m[-1] == motion.x_m[-still - 1]
