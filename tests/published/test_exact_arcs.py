"""Motion on exact arcs against worked numbers, rules of the literature, and an adaptive integrator."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from registry.numerics.kinematics import end_pose, path
from registry.numerics.rolling_noise import noise_covariance

Float = NDArray[np.float64]


def test_worked_numbers_of_a_gentle_arc() -> None:
    """Forward kinematics of differential drive, s = (c_R n_R + c_L n_L)/2 and turn = (c_R n_R - c_L n_L)/W, on an exact
    arc: computed independently with (s / turn) sin(turn) and (s / turn)(1 - cos(turn)).
    """
    pose = end_pose(np.array([20_000.0]), np.array([20_000.0]), np.array([0.5e-3, 0.5005e-3, 0.6])).pose
    assert np.degrees(pose[2]) == pytest.approx(0.954929659, abs=5e-10)
    assert pose[:2] * 1000 == pytest.approx([10004.53681199, 83.37307004], abs=5e-9)
    assert np.hypot(*pose[:2]) * 1000 == pytest.approx(10004.88420179, abs=5e-9)


def test_equal_counts_are_straight_ahead_and_a_full_turn_takes_the_counts_of_the_circumference() -> None:
    """Common practice, no source: 0.349 mm a tick, 150 mm between the tracks. 1000 ticks on both sides are 349 mm; a
    difference of W 2 pi / k = 2700.5 ticks is one full turn in place.
    """
    parameters = np.array([0.349e-3, 0.349e-3, 0.150])
    ahead = end_pose(np.full(10, 100.0), np.full(10, 100.0), parameters).pose
    assert ahead == pytest.approx([0.349, 0.0, 0.0], abs=1e-15)
    difference = 2700.5
    turned = end_pose(np.full(50, -difference / 100), np.full(50, difference / 100), parameters).pose
    # 2700.5 is rounded: a twentieth of a tick is 0.007 degrees.
    assert np.degrees(turned[2]) == pytest.approx(360.0, abs=0.007)
    assert turned[:2] == pytest.approx([0.0, 0.0], abs=1e-12)
    exact = 0.150 * 2 * np.pi / 0.349e-3
    assert exact == pytest.approx(difference, abs=0.05)


@pytest.mark.parametrize("samples", [1, 40])
def test_a_side_ratio_on_a_straight_turns_and_shifts_by_the_published_rule(samples: int) -> None:
    """Sensitivity rules of odometry (derived; also in a public study note on Borenstein & Feng 1996): a ratio error e
    on a straight D turns by e D / W and shifts by e D^2 / (2 W): 1e-3, 10 m, 500 mm give 1.14592 degrees and 100 mm.
    """
    k, ratio, distance, width = 1e-3, 1e-3, 10.0, 0.5
    ticks = np.full(samples, distance / k / samples)
    parameters = np.array([k * (1 - ratio / 2), k * (1 + ratio / 2), width])
    pose = end_pose(ticks, ticks, parameters).pose
    assert np.degrees(pose[2]) == pytest.approx(1.14592, abs=5e-6)
    # The rule is of first order; the turn of 0.02 rad takes its square over twelve, 3e-5, off the shift.
    assert pose[1] == pytest.approx(0.100, rel=5e-5)


def test_a_width_error_is_a_share_of_every_turn_and_a_scale_error_a_share_of_every_distance() -> None:
    """The same source: width error fraction dW / W in a turn, scale error fraction in a distance."""
    spin = np.array([-500.0]), np.array([500.0])
    straight = np.array([500.0]), np.array([500.0])
    nominal = np.array([1e-3, 1e-3, 0.5])
    turn = end_pose(*spin, nominal).pose[2]
    assert end_pose(*spin, nominal * [1, 1, 1.01]).pose[2] == pytest.approx(turn / 1.01, rel=1e-12)
    far = end_pose(*straight, nominal).pose[0]
    assert end_pose(*straight, nominal * [1.01, 1.01, 1]).pose[0] == pytest.approx(far * 1.01, rel=1e-12)


WIDTH = 0.61
SPEEDS = [(0.5, 0.5), (0.4, 0.6), (-0.3, 0.3), (0.6, 0.2), (0.0, 0.5), (-0.4, -0.45), (0.5, -0.5), (0.3, 0.31)]


def _rates(left_speed: float, right_speed: float) -> Callable[[float, Float], Float]:
    """Motion and its covariance together: the state (x, y, heading) and, row by row, P' = A P + P A^T + B Q B^T."""

    def rates(_: float, state: Float) -> Float:
        heading, covariance = state[2], state[3:].reshape(3, 3)
        speed, cosine, sine = 0.5 * (left_speed + right_speed), np.cos(heading), np.sin(heading)
        a = np.array([[0, 0, -speed * sine], [0, 0, speed * cosine], [0, 0, 0]])
        b = np.array([[0.5 * cosine, 0.5 * cosine], [0.5 * sine, 0.5 * sine], [-1 / WIDTH, 1 / WIDTH]])
        noise = b @ np.diag([abs(left_speed), abs(right_speed)]) @ b.T
        moved = a @ covariance + covariance @ a.T + noise
        turning = (right_speed - left_speed) / WIDTH
        return np.array([speed * cosine, speed * sine, turning, *moved.ravel()])

    return rates


def test_pieces_of_constant_speed_agree_with_an_adaptive_integrator_in_pose_and_covariance() -> None:
    """scipy.integrate.solve_ivp (DOP853) on the differential equations. The covariance is the linear perturbation of
    Kelly, Linearized error propagation in odometry, International Journal of Robotics Research 23 (2004) 179-218, with
    the noise of Chong & Kleeman (1997).
    """
    state, duration_s = np.zeros(12), 1.7
    for left_speed, right_speed in SPEEDS:
        solved = solve_ivp(_rates(left_speed, right_speed), (0.0, duration_s), state, "DOP853", rtol=1e-12, atol=1e-13)
        state = solved.y[:, -1]
    left, right = (np.array(side) * duration_s / 1e-3 for side in zip(*SPEEDS, strict=True))
    parameters = np.array([1e-3, 1e-3, WIDTH])
    assert end_pose(left, right, parameters).pose == pytest.approx(state[:3], abs=1e-10)
    # Sampled at 200 readings a piece, the two Gauss points of the covariance are exact to eleven digits.
    finer = np.repeat(left / 200, 200), np.repeat(right / 200, 200)
    assert noise_covariance(*finer, parameters) == pytest.approx(state[3:].reshape(3, 3), rel=1e-9, abs=1e-9)


def _smooth_speeds(t: float) -> tuple[float, float]:
    return 0.4 + 0.3 * np.sin(1.3 * t), 0.45 + 0.25 * np.cos(0.9 * t + 0.4)


def _smooth_distances(t: Float) -> tuple[Float, Float]:
    left = 0.4 * t - 0.3 / 1.3 * (np.cos(1.3 * t) - 1)
    right = 0.45 * t + 0.25 / 0.9 * (np.sin(0.9 * t + 0.4) - np.sin(0.4))
    return left, right


def test_a_smooth_drive_converges_to_the_adaptive_integrator_with_the_square_of_the_sampling() -> None:
    """scipy.integrate.solve_ivp (DOP853). Between samples the speeds are taken as constant: a second-order error."""

    def rates(t: float, state: Float) -> list[float]:
        left, right = _smooth_speeds(t)
        speed = 0.5 * (left + right)
        return [speed * np.cos(state[2]), speed * np.sin(state[2]), (right - left) / WIDTH]

    truth = solve_ivp(rates, (0.0, 20.0), np.zeros(3), "DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
    errors = []
    for rate_hz in (25, 50, 100):
        t = np.linspace(0.0, 20.0, 20 * rate_hz + 1)
        left, right = (np.diff(side) / 1e-3 for side in _smooth_distances(t))
        pose = path(left, right, np.array([1e-3, 1e-3, WIDTH]))[-1]
        assert pose[2] == pytest.approx(truth[2], abs=1e-9)
        errors.append(float(np.hypot(*(pose - truth)[:2])))
    # At 100 readings a second, a fiftieth of a millimetre after 8 m of this drive.
    assert errors[2] < 2e-5
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.02)
    assert errors[1] / errors[2] == pytest.approx(4.0, rel=0.02)
