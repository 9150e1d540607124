"""What the numerics cost, as ratios to a peer measured in the same run."""

from __future__ import annotations

from collections.abc import Callable
from math import cos, sin

import numpy as np
import pytest
from numpy.typing import NDArray

from registry.numerics.closure_map import fold
from registry.numerics.fit import fit
from registry.numerics.kinematics import end_pose
from registry.numerics.stacks import MapStack
from tests.numerics.drives import session

pytestmark = pytest.mark.benchmark

Float = NDArray[np.float64]
Record = Callable[[str, object], None]
Timer = Callable[..., float]

PARAMETERS = np.array([3.49e-4, 3.50e-4, 0.62])


def _weaving(samples: int, length_m: float = 183.0) -> tuple[Float, Float]:
    """Whole ticks of a drive that weaves and comes round several times."""
    turn = 2 * np.pi * 5 / samples * (1 + np.sin(np.arange(samples) / 50))
    left = np.round((length_m / samples - turn * 0.31) / PARAMETERS[0])
    right = np.round((length_m / samples + turn * 0.31) / PARAMETERS[1])
    return left, right


def test_end_pose_and_jacobian_cost_few_passes_of_sine_and_cosine(cpu_ms: Timer, record_property: Record) -> None:
    left, right = _weaving(12_000)
    headings = np.cumsum(PARAMETERS[1] * right - PARAMETERS[0] * left) / PARAMETERS[2]
    one_pass = cpu_ms(lambda: (np.sin(headings), np.cos(headings)), repeats=200)
    ours = cpu_ms(lambda: end_pose(left, right, PARAMETERS), repeats=200)
    record_property("passes of sine and cosine (at most 8)", round(ours / one_pass, 2))
    record_property("ms", round(ours, 3))
    assert ours <= 8 * one_pass


def _plain_loop(left: list[float], right: list[float], k_left: float, k_right: float, width: float) -> list[float]:
    """Sample by sample, as one writes it first."""
    x = y = heading = 0.0
    for ticks_left, ticks_right in zip(left, right, strict=True):
        rolled_left, rolled_right = k_left * ticks_left, k_right * ticks_right
        advance, turn = (rolled_left + rolled_right) / 2, (rolled_right - rolled_left) / width
        if abs(turn) < 1e-9:
            x += advance * cos(heading)
            y += advance * sin(heading)
        else:
            x += advance / turn * (sin(heading + turn) - sin(heading))
            y -= advance / turn * (cos(heading + turn) - cos(heading))
        heading += turn
    return [x, y, heading]


def _difference_quotients(left: list[float], right: list[float]) -> tuple[Float, Float]:
    here = np.array(_plain_loop(left, right, *PARAMETERS))
    columns = []
    for place in range(3):
        moved = PARAMETERS.copy()
        moved[place] *= 1 + 1e-6
        columns.append((np.array(_plain_loop(left, right, *moved)) - here) / (1e-6 * PARAMETERS[place]))
    return here, np.column_stack(columns)


def test_they_are_many_times_faster_than_a_plain_loop_with_difference_quotients(
    cpu_ms: Timer, record_property: Record
) -> None:
    left, right = _weaving(12_000)
    plain_left, plain_right = left.tolist(), right.tolist()
    pose, jacobian = _difference_quotients(plain_left, plain_right)
    ours = end_pose(left, right, PARAMETERS)
    # The same answer first: quotients of 1e-6 err by that share of the curvature, some hundred times the slope.
    assert ours.pose == pytest.approx(pose, abs=1e-8)
    slope = np.abs(ours.jacobian * PARAMETERS).max()
    assert (ours.jacobian - jacobian) * PARAMETERS == pytest.approx(0.0, abs=1e-3 * slope)
    loop = cpu_ms(lambda: _difference_quotients(plain_left, plain_right), repeats=5)
    fast = cpu_ms(lambda: end_pose(left, right, PARAMETERS), repeats=100)
    record_property("times faster (at least 20)", round(loop / fast, 1))
    assert loop >= 20 * fast


def test_folding_twelve_thousand_samples(cpu_ms: Timer, record_property: Record) -> None:
    left, right = _weaving(12_000)
    ms = cpu_ms(lambda: fold(left, right, PARAMETERS))
    item = fold(left, right, PARAMETERS)
    record_property("ms", round(ms, 1))
    record_property("terms", "{} x {}".format(*item.coefficients.shape))
    record_property("bound on the error, um", round(1e6 * item.error_m, 2))
    # Intake has 100 ms in all.
    assert ms < 60


def test_a_fit_of_sixty_folded_runs(cpu_ms: Timer, record_property: Record) -> None:
    given = session(1, repeats=5, rate_hz=5.0)
    stack = MapStack([fold(*ticks, given.truth.parameters) for ticks in given.counts], given.levers_m)
    start = given.truth.parameters * [1.002, 0.999, 1.003]
    ms = cpu_ms(lambda: fit(stack, given.closures, start))
    record_property("ms", round(ms, 2))
    # A third of what a whole evaluation may take.
    assert ms < 10


def test_predicting_sixty_folded_runs(cpu_ms: Timer, record_property: Record) -> None:
    given = session(1, repeats=5, rate_hz=5.0)
    stack = MapStack([fold(*ticks, given.truth.parameters) for ticks in given.counts], given.levers_m)
    ms = cpu_ms(lambda: stack.predict(given.truth.parameters), repeats=200)
    record_property("us a run", round(1e3 * ms / 60, 2))
    assert ms < 3
