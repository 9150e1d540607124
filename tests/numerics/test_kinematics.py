"""Exact arcs: what must hold whatever the drive."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from registry.numerics.kinematics import at_reference_point, end_pose, lever_jacobian, path, sinc_and_slope
from registry.numerics.stacks import Prediction, at_levers

from .drives import Float, Truth, drive, eight, half_loop, round_square, spin, traverse

PARAMETERS = st.tuples(st.floats(1e-4, 5e-3), st.floats(0.8, 1.25), st.floats(0.1, 3.0)).map(
    lambda drawn: np.array([drawn[0], drawn[0] * drawn[1], drawn[2]])
)
TICKS = arrays.arrays(np.int16, st.integers(1, 40), elements=st.integers(-300, 300)).map(lambda a: a.astype(np.float64))


@st.composite
def drives(draw: st.DrawFn) -> tuple[Float, Float, Float]:
    """Increments of both sides, from standing still to several turns in one sample, and parameters."""
    left = draw(TICKS)
    right = draw(
        arrays.arrays(np.int16, left.size, elements=st.integers(-300, 300)).map(lambda a: a.astype(np.float64))
    )
    return left, right, draw(PARAMETERS)


def _rolled_m(left: Float, right: Float, parameters: Float) -> float:
    return float((parameters[0] * np.abs(left) + parameters[1] * np.abs(right)).sum()) + 1e-6


@given(drives(), st.integers(2, 7))
def test_the_end_does_not_depend_on_how_the_samples_are_cut(case: tuple[Float, Float, Float], parts: int) -> None:
    left, right, parameters = case
    whole = end_pose(left, right, parameters)
    cut = end_pose(np.repeat(left / parts, parts), np.repeat(right / parts, parts), parameters)
    # Rounding only: a thousand ulps of the way rolled.
    assert cut.pose == pytest.approx(whole.pose, abs=1e-12 * (1 + _rolled_m(*case) * (1 + 1 / parameters[2])))
    scale = np.abs(whole.jacobian * parameters).max() + _rolled_m(*case) * (1 + np.abs(whole.pose[2]))
    assert (cut.jacobian - whole.jacobian) * parameters == pytest.approx(0.0, abs=1e-11 * scale)


@given(drives())
def test_a_mirrored_run_swaps_the_sides(case: tuple[Float, Float, Float]) -> None:
    left, right, parameters = case
    one = end_pose(left, right, parameters)
    other = end_pose(right, left, parameters[[1, 0, 2]])
    mirror = np.array([1.0, -1.0, -1.0])
    tolerance = 1e-13 * _rolled_m(*case) * (1 + _rolled_m(*case) / parameters[2])
    assert other.pose == pytest.approx(mirror * one.pose, abs=tolerance)
    mirrored = mirror[:, None] * one.jacobian[:, [1, 0, 2]]
    assert (other.jacobian - mirrored) * parameters == pytest.approx(
        0.0, abs=10 * tolerance * (1 + 1 / parameters[2]) * (1 + np.abs(one.pose[2]))
    )


@given(drives(), st.floats(0.3, 3.0))
def test_scaling_ticks_and_width_together_scales_the_path_and_turns_nothing(
    case: tuple[Float, Float, Float], scale: float
) -> None:
    left, right, parameters = case
    one, other = end_pose(left, right, parameters).pose, end_pose(left, right, scale * parameters).pose
    tolerance = 1e-12 * _rolled_m(*case) * (1 + 1 / parameters[2])
    assert other == pytest.approx(one * [scale, scale, 1.0], abs=scale * tolerance + tolerance)


@pytest.mark.parametrize("scale", [0.8, 1.01, 1.3])
def test_scaling_leaves_a_closed_path_closed(scale: float) -> None:
    truth = Truth()
    run = drive(eight(2.0), truth, np.random.default_rng(1), steps_a_sample=50)
    one = end_pose(*run.ticks, truth.parameters).pose
    other = end_pose(*run.ticks, scale * truth.parameters).pose
    # The figure of eight is 25 m long; it closes to the ticks' own size whatever the scale.
    assert np.hypot(*one[:2]) < 0.005
    assert other == pytest.approx(one * [scale, scale, 1.0], abs=1e-9)


@given(drives())
def test_the_end_is_homogeneous_so_that_the_jacobian_gives_back_the_position(
    case: tuple[Float, Float, Float],
) -> None:
    pose, jacobian = end_pose(*case)
    tolerance = 1e-12 * _rolled_m(*case) * (1 + _rolled_m(*case) / case[2][2])
    assert jacobian @ case[2] == pytest.approx([pose[0], pose[1], 0.0], abs=tolerance)


@given(drives())
def test_the_jacobian_agrees_with_differences(case: tuple[Float, Float, Float]) -> None:
    left, right, parameters = case
    analytic = end_pose(*case).jacobian * parameters
    turned = _rolled_m(*case) / parameters[2]
    h = 1e-3 / (1 + turned)
    for column in range(3):
        step = np.zeros(3)
        step[column] = h * parameters[column]
        near = [end_pose(left, right, parameters + s * step).pose for s in (-2.0, -1.0, 1.0, 2.0)]
        slope = (near[0] - 8 * near[1] + 8 * near[2] - near[3]) / (12 * h)
        # Five points: the error is h^4 / 30 of the fifth derivative (at most rolled x turned^5), beside rounding.
        scale = (1 + _rolled_m(*case)) * (1 + turned)
        assert analytic[:, column] == pytest.approx(slope, abs=1e-9 * scale)


@given(drives())
def test_the_path_ends_at_the_end_pose_and_starts_at_the_origin(case: tuple[Float, Float, Float]) -> None:
    poses = path(*case)
    assert poses.shape == (case[0].size + 1, 3)
    assert poses[0].tolist() == [0.0, 0.0, 0.0]
    tolerance = 1e-12 * _rolled_m(*case) * (1 + 1 / case[2][2])
    assert poses[-1] == pytest.approx(end_pose(*case).pose, abs=tolerance)


@given(drives(), st.integers(0, 39))
def test_two_parts_of_a_run_compose_to_the_whole(case: tuple[Float, Float, Float], at: int) -> None:
    left, right, parameters = case
    at = min(at, left.size)
    first = end_pose(left[:at], right[:at], parameters).pose
    second = end_pose(left[at:], right[at:], parameters).pose
    turned = complex(*first[:2]) + complex(*second[:2]) * np.exp(1j * first[2])
    tolerance = 1e-12 * _rolled_m(*case) * (1 + _rolled_m(*case) / parameters[2])
    assert [turned.real, turned.imag, first[2] + second[2]] == pytest.approx(end_pose(*case).pose, abs=tolerance)


def test_a_run_driven_backwards_along_its_own_track_comes_home() -> None:
    run = drive(traverse(4.0, 0.8, 5.0), Truth(), np.random.default_rng(2))
    there_and_back = [np.concatenate([side, -side[::-1]]) for side in run.ticks]
    assert end_pose(*there_and_back, Truth().parameters).pose == pytest.approx(0.0, abs=1e-12)


def test_a_run_without_samples_ends_where_it_starts() -> None:
    pose, jacobian = end_pose(np.zeros(0), np.zeros(0), Truth().parameters)
    assert pose.tolist() == [0.0, 0.0, 0.0]
    assert jacobian == pytest.approx(0.0)
    assert path(np.zeros(0), np.zeros(0), Truth().parameters).tolist() == [[0.0, 0.0, 0.0]]


@given(st.floats(-40.0, 40.0))
def test_sinc_and_its_slope_have_no_seam(half_turn: float) -> None:
    around = half_turn + np.array([-1e-5, 0.0, 1e-5])
    for array in (around[1:2], np.append(around[1:2], 39.0)):
        value, slope = sinc_and_slope(array)
        assert value[0] == pytest.approx(np.sinc(half_turn / np.pi), abs=1e-14)
        central = (np.sinc(around[2] / np.pi) - np.sinc(around[0] / np.pi)) / 2e-5
        # Differences of sinc over 2e-5 round at 1e-11 and err by h^2 / 6.
        assert slope[0] == pytest.approx(central, abs=1e-9)


def test_the_series_and_the_closed_form_of_sinc_meet_at_the_seam() -> None:
    seam = np.array([0.2 - 1e-12, 0.2 + 1e-12])
    value, slope = sinc_and_slope(seam)
    assert value[0] == pytest.approx(value[1], abs=1e-12)
    assert slope[0] == pytest.approx(slope[1], abs=2e-12)


@pytest.mark.parametrize(
    "legs", [traverse(4.0, 0.8, 5.0), half_loop(4.0, -1), spin(2.3), round_square(3.0, 0.8, 1)], ids=str
)
def test_a_mark_off_the_axle_ends_where_the_stepped_world_carries_it(legs: list[tuple[float, float]]) -> None:
    truth = Truth(left_m_per_tick=2e-7, right_m_per_tick=2.002e-7, lever_m=(0.43, -0.17))
    run = drive(legs, truth, np.random.default_rng(3), steps_a_sample=100)
    ends = at_reference_point(path(*run.ticks, truth.parameters), np.array(truth.lever_m))
    assert ends[0] == pytest.approx([0.0, 0.0, 0.0], abs=1e-15)
    # Ticks of 0.2 um leave the profile inside a sample as the only difference.
    assert ends[-1] == pytest.approx(run.end, abs=5e-5)
    moved = at_levers(_prediction(run.ticks, truth), np.array([truth.lever_m]))
    assert moved.pose[0] == pytest.approx(ends[-1], abs=1e-9)


def _prediction(ticks: tuple[Float, Float], truth: Truth) -> Prediction:
    end = end_pose(*ticks, truth.parameters)
    return Prediction(end.pose[None], end.jacobian[None], np.eye(3)[None])


def test_the_jacobian_at_the_mark_agrees_with_differences_of_its_position() -> None:
    truth = Truth(lever_m=(0.43, -0.17))
    run = drive(half_loop(4.0, 1), truth, np.random.default_rng(4))
    levers = np.array([truth.lever_m])
    moved = at_levers(_prediction(run.ticks, truth), levers)
    for column in range(3):
        ends = []
        for sign in (-1.0, 1.0):
            parameters = truth.parameters
            parameters[column] *= 1 + sign * 1e-6
            poses = path(*run.ticks, parameters)
            ends.append(at_reference_point(poses, levers[0])[-1])
        slope = (ends[1] - ends[0]) / 2e-6
        assert moved.jacobian[0][:, column] * truth.parameters[column] == pytest.approx(slope, abs=1e-6)
    # A covariance is carried by the same Jacobian that moves the pose.
    carry = lever_jacobian(moved.pose[:, 2], levers)[0]
    assert moved.noise[0] == pytest.approx(carry @ carry.T, abs=1e-12)
