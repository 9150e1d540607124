"""Misclosures: measured end minus predicted end, whatever was measured."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.numerics.closure import Closures, component_jacobian, misclosure, misclosure_covariance, wrap

ANGLES = st.floats(-400.0, 400.0)


def _closures(measured: list[float], present: list[bool], turns_counted: bool = False) -> Closures:
    return Closures(
        np.array([measured]), np.array([present]), np.array([[4e-6, 9e-6, 1e-4, 16e-6]]), np.array([turns_counted])
    )


@given(ANGLES, st.integers(-30, 30))
def test_headings_are_compared_modulo_a_full_turn(angle: float, turns: int) -> None:
    closures = _closures([0.0, 0.0, angle, 0.0], [False, False, True, False])
    predicted = np.array([[0.0, 0.0, angle + 2 * np.pi * turns - 0.01]])
    assert misclosure(closures, predicted)[0] == pytest.approx([0.0, 0.0, 0.01, 0.0], abs=1e-9)


@given(ANGLES, st.integers(1, 30))
def test_counted_turns_are_compared_as_they_are(angle: float, turns: int) -> None:
    closures = _closures([0.0, 0.0, angle, 0.0], [False, False, True, False], turns_counted=True)
    predicted = np.array([[0.0, 0.0, angle + 2 * np.pi * turns]])
    assert misclosure(closures, predicted)[0, 2] == pytest.approx(-2 * np.pi * turns, abs=1e-9)


@given(ANGLES)
def test_a_wrapped_angle_is_the_same_direction_within_half_a_turn(angle: float) -> None:
    wrapped = float(wrap(np.array(angle)))
    assert -np.pi <= wrapped < np.pi
    assert np.exp(1j * wrapped) == pytest.approx(np.exp(1j * angle), abs=1e-12)


def test_each_component_is_measured_minus_predicted() -> None:
    closures = _closures([3.1, 4.1, 0.5, 5.02], [True] * 4)
    assert misclosure(closures, np.array([[3.0, 4.0, 0.4]]))[0] == pytest.approx([0.1, 0.1, 0.1, 0.02])


def test_what_was_not_measured_has_no_misclosure_and_unit_variance() -> None:
    closures = _closures([9.0, np.nan, 9.0, 5.02], [False, False, False, True])
    poses = np.array([[3.0, 4.0, 0.4]])
    assert misclosure(closures, poses)[0] == pytest.approx([0.0, 0.0, 0.0, 0.02])
    covariance = misclosure_covariance(closures, np.eye(3)[None], component_jacobian(poses))[0]
    assert covariance == pytest.approx(np.diag([1.0, 1.0, 1.0, 1.0 + 16e-6]))


@given(st.floats(-20.0, 20.0), st.floats(-20.0, 20.0))
def test_the_gradient_of_the_straight_distance_agrees_with_differences(x: float, y: float) -> None:
    if np.hypot(x, y) < 0.1:
        x += 1.0
    gradient = component_jacobian(np.array([[x, y, 0.3]]))[0, 3]
    h = 1e-6
    slopes = [
        (np.hypot(x + h, y) - np.hypot(x - h, y)) / (2 * h),
        (np.hypot(x, y + h) - np.hypot(x, y - h)) / (2 * h),
        0.0,
    ]
    assert gradient == pytest.approx(slopes, abs=1e-8)


def test_a_distance_of_nothing_has_no_direction() -> None:
    assert component_jacobian(np.zeros((1, 3)))[0, 3].tolist() == [0.0, 0.0, 0.0]


def test_the_covariance_of_a_misclosure_is_the_marks_own_and_that_of_the_predicted_pose() -> None:
    closures = _closures([3.0, 4.0, 0.4, 5.0], [True] * 4)
    poses = np.array([[3.0, 4.0, 0.4]])
    pose_covariance = np.diag([1e-4, 4e-4, 1e-5])[None]
    covariance = misclosure_covariance(closures, pose_covariance, component_jacobian(poses))[0]
    # Along the direction (0.6, 0.8) to the end.
    assert covariance[3, 3] == pytest.approx(16e-6 + 0.36e-4 + 0.64 * 4e-4)
    assert covariance[0, 3] == pytest.approx(0.6e-4)
    assert np.diag(covariance)[:3] == pytest.approx([4e-6 + 1e-4, 9e-6 + 4e-4, 1e-4 + 1e-5])


def test_some_of_the_closures_can_be_taken() -> None:
    both = Closures(np.arange(8.0).reshape(2, 4), np.ones((2, 4), bool), np.ones((2, 4)), np.array([False, True]))
    taken = both.take(np.array([False, True]))
    assert len(both) == 2
    assert len(taken) == 1
    assert taken.measured.tolist() == [[4.0, 5.0, 6.0, 7.0]]
    assert taken.turns_counted.tolist() == [True]
