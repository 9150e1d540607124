"""What runs can and cannot tell, each statement as the fit says it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.numerics.fit import Fit, fit
from registry.numerics.observability import (
    deviation,
    observed,
    quantity_covariance,
    relative_from_quantities,
    to_parameters,
    to_quantities,
)
from registry.numerics.stacks import CountsStack

from .drives import Float, Leg, Truth, drive, eight, half_loop, is_spin, read_ends, round_square, spin, square, straight

TRUTH = Truth(rolling_noise_m=0.49e-6)
#: The usual tolerances of tick factor, side ratio and width.
TOLERANCE = np.array([0.005, 0.0015, 0.015])
SCALE, RATIO, WIDTH = range(3)
LEFT_SQUARE, RIGHT_SQUARE = round_square(3.0, 0.5, 1), round_square(3.0, 0.5, -1)


def _fit(courses: Sequence[list[Leg]], components: str = "xyh") -> Fit:
    """Drive and fit; components are x, y, h (heading, with counted turns on spins) and d (straight distance)."""
    rng = np.random.default_rng(31)
    runs = [drive(legs, TRUTH, rng, rate_hz=10.0) for legs in courses]
    closures = read_ends(runs, rng, turns_counted=[is_spin(legs) for legs in courses])
    closures.measured[:, 3] = np.hypot(closures.measured[:, 0], closures.measured[:, 1])
    closures.variance[:, 3] = closures.variance[:, 0]
    closures.present[:] = [name in components for name in "xyhd"]
    stack = CountsStack([run.ticks for run in runs], np.zeros((len(runs), 2)))
    found = fit(stack, closures, TRUTH.parameters * [1.001, 0.9995, 1.004])
    assert found.status == "converged"
    return found


def _observed(found: Fit) -> list[bool]:
    return [bool(item) for item in observed(found.u_quantities, TOLERANCE)]


def _u_of(found: Fit, direction: Sequence[float]) -> float:
    """Standard uncertainty of a combination of (ln tick factor, side ratio, ln width)."""
    h = np.array(direction, dtype=np.float64)
    return float(np.sqrt(h @ found.covariance @ h))


@pytest.mark.parametrize("times", [1, 3, 30])
def test_closed_loops_say_nothing_about_scale_however_many_are_driven(times: int) -> None:
    found = _fit([LEFT_SQUARE, RIGHT_SQUARE] * times)
    assert _observed(found) == [False, True, False]
    # Tick factors and width together are as free as at the start; the width relative to the tick factor is well known.
    assert found.u_quantities[SCALE] > 0.3
    assert found.covariance[0, 2] > 0.99 * found.u_quantities[SCALE] * found.u_quantities[WIDTH]
    assert _u_of(found, (-1, 0, 1)) < TOLERANCE[WIDTH] / 3


def test_one_straight_beside_closed_loops_settles_the_scale_and_with_it_the_width() -> None:
    assert _observed(_fit([LEFT_SQUARE, RIGHT_SQUARE, straight(10.0)])) == [True, True, True]


@pytest.mark.parametrize("loop", [LEFT_SQUARE, square(3.0, 1)], ids=["round corners", "corners in place"])
def test_loops_of_one_size_in_one_sense_leave_a_combination_of_side_ratio_and_width_open(loop: list[Leg]) -> None:
    found = _fit([loop] * 12)
    assert not _observed(found)[RATIO]
    assert _u_of(found, (-1, 0, 1)) > TOLERANCE[WIDTH] / 3
    # What these loops do know, at any scale, is a hundred times more certain than what they leave open.
    with_scale = np.outer(found.covariance[1:, 0], found.covariance[0, 1:]) / found.covariance[0, 0]
    spread = np.sqrt(np.linalg.eigvalsh(found.covariance[1:, 1:] - with_scale))
    assert spread[1] > 100 * spread[0]


def test_loops_in_the_other_sense_separate_side_ratio_from_width() -> None:
    found = _fit([LEFT_SQUARE] * 6 + [RIGHT_SQUARE] * 6)
    assert _observed(found)[RATIO]
    assert _u_of(found, (-1, 0, 1)) < TOLERANCE[WIDTH] / 3


def test_loops_of_clearly_different_perimeter_separate_them_too() -> None:
    found = _fit([LEFT_SQUARE] * 6 + [round_square(8.0, 0.5, 1)] * 6)
    assert _observed(found)[RATIO]
    assert _u_of(found, (-1, 0, 1)) < TOLERANCE[WIDTH] / 3
    # The width alone stays unseen: the scale is free.
    assert not _observed(found)[WIDTH]


@pytest.mark.parametrize("components", ["xyh", "xh", "xy", "dh"])
def test_a_straight_gives_scale_and_side_ratio_and_nothing_on_the_width(components: str) -> None:
    found = _fit([straight(10.0)] * 6, components)
    assert _observed(found) == [True, True, False]
    assert found.u_quantities[WIDTH] > 0.3


@pytest.mark.parametrize("components", ["x", "d"])
def test_a_straight_whose_distance_alone_is_known_says_nothing_on_the_side_ratio(components: str) -> None:
    found = _fit([straight(length) for length in (6.0, 8.0, 10.0, 12.0, 14.0, 16.0)], components)
    assert _observed(found) == [True, False, False]


def test_a_straight_whose_side_offset_or_heading_alone_is_known_gives_the_side_ratio_but_no_scale() -> None:
    for components in ("y", "h"):
        found = _fit([straight(10.0)] * 6, components)
        assert _observed(found)[SCALE] is False
        assert _observed(found)[WIDTH] is False
        # A side offset or heading is side ratio over width: known as far as the width is.
        at_known_width = found.covariance[1, 1] - found.covariance[1, 2] ** 2 / found.covariance[2, 2]
        assert np.sqrt(at_known_width) < TOLERANCE[RATIO] / 3


def test_a_spin_gives_width_relative_to_tick_factor_and_nothing_else() -> None:
    found = _fit([spin(3), spin(-3)] * 3, "h")
    assert _observed(found) == [False, False, False]
    assert _u_of(found, (-1, 0, 1)) < 0.001
    assert _u_of(found, (1, 0, 1)) > 0.3
    assert found.u_quantities[RATIO] > TOLERANCE[RATIO]


def test_spins_and_straights_together_give_everything() -> None:
    assert _observed(_fit([straight(10.0)] * 3 + [spin(3), spin(-3)])) == [True, True, True]


def test_a_figure_of_eight_gives_what_loops_in_both_senses_give() -> None:
    found = _fit([eight(1.5)] * 6)
    assert _observed(found) == [False, True, False]
    assert _u_of(found, (-1, 0, 1)) < TOLERANCE[WIDTH] / 3


def test_drives_from_mark_to_mark_give_scale_and_side_ratio_and_weakly_the_width() -> None:
    found = _fit([[(4.0, 0.0), (0.0, 0.6), (5.0, 0.0)], [(5.0, 0.0), (0.0, -0.6), (4.0, 0.0)]] * 3)
    assert _observed(found)[:2] == [True, True]
    assert found.u_quantities[WIDTH] > 4 * found.u_quantities[SCALE]


def test_half_loops_in_both_senses_tell_far_more_than_in_one() -> None:
    both = _fit([half_loop(6.0, 1), half_loop(6.0, -1)] * 6)
    one = _fit([half_loop(6.0, 1)] * 12)
    # They end half a side from their start: too near for the scale.
    assert _observed(both) == [False, True, True]
    assert _observed(one) == [False, False, False]
    assert np.all(both.u_quantities < 0.1 * one.u_quantities)


def test_what_is_not_observed_stays_at_the_start_and_says_so() -> None:
    found = _fit([straight(10.0)] * 6)
    # Started 0.4 % wide: nothing has moved it far in its own, enormous, uncertainty.
    off = to_quantities(found.parameters)[WIDTH] - to_quantities(TRUTH.parameters)[WIDTH]
    assert abs(off) < found.u_quantities[WIDTH]


def test_more_runs_of_a_kind_help_only_where_that_kind_looks() -> None:
    few, many = _fit([straight(10.0)] * 4), _fit([straight(10.0)] * 24)
    assert many.u_quantities[:2] == pytest.approx(few.u_quantities[:2] / np.sqrt(6), rel=0.5)
    assert many.u_quantities[WIDTH] > 0.3


PARAMETERS = st.tuples(st.floats(1e-5, 1e-2), st.floats(0.7, 1.4), st.floats(0.05, 5.0)).map(
    lambda drawn: np.array([drawn[0], drawn[0] * drawn[1], drawn[2]])
)


@given(PARAMETERS)
def test_quantities_and_parameters_are_two_names_of_the_same(parameters: Float) -> None:
    assert to_parameters(to_quantities(parameters)) == pytest.approx(parameters, rel=1e-12)


@given(PARAMETERS)
def test_the_derivative_between_the_two_agrees_with_differences(parameters: Float) -> None:
    quantities = to_quantities(parameters)
    forward = relative_from_quantities(float(quantities[1]))
    for column in range(3):
        step = np.zeros(3)
        step[column] = 1e-6
        slope = np.log(to_parameters(quantities + step) / to_parameters(quantities - step)) / 2e-6
        assert forward[:, column] == pytest.approx(slope, abs=1e-8)


@given(PARAMETERS)
def test_a_covariance_goes_to_the_quantities_and_back(parameters: Float) -> None:
    relative = np.array([[4.0, 1.0, 0.5], [1.0, 3.0, -0.2], [0.5, -0.2, 9.0]]) * 1e-6
    quantities = quantity_covariance(relative, parameters)
    forward = relative_from_quantities(float(parameters[1] / parameters[0]) - 1.0)
    assert forward @ quantities @ forward.T == pytest.approx(relative, rel=1e-9, abs=1e-18)


def test_deviations_are_relative_and_the_side_ratio_a_difference() -> None:
    reference = np.array([3.50e-4, 3.50e-4, 0.600])
    found = deviation(np.array([3.43e-4, 3.43e-4 * 1.002, 0.606]), reference)
    assert found == pytest.approx([0.98 * 1.001 - 1, 0.002, 0.01], rel=1e-9)


@given(PARAMETERS)
def test_nothing_deviates_from_itself(parameters: Float) -> None:
    assert deviation(parameters, parameters) == pytest.approx([0.0, 0.0, 0.0], abs=1e-12)


def test_a_third_of_the_tolerance_is_the_limit_of_observed() -> None:
    u = np.array([0.00166, 0.00051, 0.00499])
    assert observed(u, TOLERANCE).tolist() == [True, False, True]
