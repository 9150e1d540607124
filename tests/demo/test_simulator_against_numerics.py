"""Two ways to the same end: the stepped world of the demo, and the exact arcs of the numerics."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

from registry.numerics.kinematics import at_reference_point, end_pose, path
from registry.numerics.rolling_noise import noise_covariance
from seed_demo.courses import Course, figure_of_eight, half_loop, spin, square, straight, traverse
from seed_demo.simulator import FloatArray, Logger, Motion, Truth, log, mark_end, move

TRUTH = Truth(3.4e-4, 3.412e-4, 0.62, mark_ahead_m=0.31, mark_left_m=-0.12)
COURSES = (
    straight(18.0, 0.03),
    half_loop(8.0, 2.0, 1, 0.05),
    half_loop(8.0, 2.0, -1, -0.04),
    square(5.0, -1, 0.03),
    figure_of_eight(2.0),
    spin(5, 1),
    traverse(20.0, 0.7, 0.04),
)


def _parameters(truth: Truth) -> FloatArray:
    return np.array([truth.left_m_per_tick, truth.right_m_per_tick, truth.width_m])


def _sampled(motion: Motion, every: int) -> tuple[FloatArray, FloatArray]:
    """Unrounded increments between every ``every``-th step and the end."""
    index = np.append(np.arange(0, motion.time_s.size - 1, every), motion.time_s.size - 1)
    return np.diff(motion.left_ticks[index]), np.diff(motion.right_ticks[index])


@pytest.mark.parametrize("course", COURSES, ids=lambda course: course.name)
def test_exact_arcs_between_samples_end_where_the_stepped_world_ends(course: Course) -> None:
    motion = move(course, TRUTH, 1.0, np.random.default_rng(1))
    poses = path(*_sampled(motion, 20), _parameters(TRUTH))
    found = at_reference_point(poses, np.array([TRUTH.mark_ahead_m, TRUTH.mark_left_m]))[-1]
    # Within 20 ms the curvature of a woven course changes a little; a hundredth of a tick's worth is 0.0034 mm.
    assert found == pytest.approx(mark_end(motion, TRUTH), abs=3.4e-6)
    assert end_pose(*_sampled(motion, 20), _parameters(TRUTH)).pose == pytest.approx(poses[-1], abs=1e-9)


@pytest.mark.parametrize("course", COURSES, ids=lambda course: course.name)
def test_whole_ticks_move_the_end_by_no_more_than_a_tick_on_each_side_can(course: Course) -> None:
    motion = move(course, TRUTH, 1.0, np.random.default_rng(2))
    written = log(motion, Logger(rate_hz=50.0, lateness_steps=2, counter_bits=40), np.random.default_rng(3))
    left, right = (np.diff(counts).astype(np.float64) for counts in (written.left_counts, written.right_counts))
    found = end_pose(left, right, _parameters(TRUTH)).pose
    far = float(np.hypot(motion.x_m, motion.y_m).max())
    tick_m = max(TRUTH.left_m_per_tick, TRUTH.right_m_per_tick)
    turn_rad = 2 * tick_m / TRUTH.width_m
    assert abs(found[2] - motion.heading_rad[-1]) < turn_rad
    assert np.hypot(found[0] - motion.x_m[-1], found[1] - motion.y_m[-1]) < 2 * tick_m + turn_rad * 2 * far


@pytest.mark.parametrize("course", [traverse(9.0, 0.7), half_loop(3.0, 1.2, -1)], ids=lambda course: course.name)
def test_the_scatter_of_stepped_ends_has_the_covariance_that_the_numerics_predict(course: Course) -> None:
    q, count = 1.0e-6, 3000
    truth = Truth(4.0e-4, 4.1e-4, 0.7, noise_m2_per_m=q)
    rng = np.random.default_rng(5)
    quiet = move(course, Truth(4.0e-4, 4.1e-4, 0.7), 9.0, rng)
    predicted = q * noise_covariance(*_sampled(quiet, 10), _parameters(truth))
    ends = np.array([mark_end(move(course, truth, 9.0, rng), truth) for _ in range(count)])
    scatter = np.cov(ends.T)
    spread = np.sqrt(np.diag(predicted))
    for row, column in product(range(3), range(3)):
        # A covariance of normal variables scatters by at most sqrt(2/n) of the product of its spreads; five of those.
        assert scatter[row, column] == pytest.approx(
            predicted[row, column], abs=5 * np.sqrt(2 / count) * spread[row] * spread[column]
        )
