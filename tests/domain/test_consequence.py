"""The words on the floor, checked against the motion itself."""

from __future__ import annotations

import math

import pytest

from registry.domain import consequence


def drive(left_rolled_m: float, right_rolled_m: float, width_m: float) -> tuple[float, float, float]:
    """Where a vehicle truly ends after one arc, written out with the circle's radius."""
    turn_rad = (right_rolled_m - left_rolled_m) / width_m
    ahead_m = 0.5 * (left_rolled_m + right_rolled_m)
    if turn_rad == 0.0:
        return ahead_m, 0.0, 0.0
    radius_m = ahead_m / turn_rad
    return radius_m * math.sin(turn_rad), radius_m * (1.0 - math.cos(turn_rad)), turn_rad


def test_a_right_side_that_rolls_further_than_believed_pulls_the_vehicle_left() -> None:
    width_m, deviation = 0.65, 0.0015
    _, left_m, turn_rad = drive(10.0 * (1 - deviation / 2), 10.0 * (1 + deviation / 2), width_m)
    assert left_m > 0.0
    assert turn_rad > 0.0
    assert consequence.side_ratio_words(deviation, width_m) == "pulls left 115 mm in 10 m"
    # The words use the small-turn form; the third-order term of the arc is h²/12 of it, here 4e-5.
    assert consequence.side_error_m(deviation, width_m) == pytest.approx(left_m, rel=1e-4)
    assert consequence.heading_error_rad(deviation, width_m) == pytest.approx(turn_rad, rel=1e-12)


def test_a_right_side_that_rolls_less_than_believed_pulls_the_vehicle_right() -> None:
    assert consequence.side_ratio_words(-0.0015, 0.65) == "pulls right 115 mm in 10 m"


def test_a_tick_factor_larger_than_believed_overshoots_and_a_smaller_one_falls_short() -> None:
    assert consequence.tick_factor_words(0.005) == "overshoots 50 mm in 10 m"
    assert consequence.tick_factor_words(-0.00031) == "falls short 3.1 mm in 10 m"


def test_a_width_larger_than_believed_turns_short_by_the_difference_of_the_arcs() -> None:
    believed_m, true_m = 1.0, 1.015
    difference_m = 2 * math.pi * believed_m
    true_turn_rad = difference_m / true_m
    assert consequence.turn_error_rad(true_m / believed_m - 1) == pytest.approx(true_turn_rad - 2 * math.pi, rel=1e-12)
    assert consequence.width_words(0.015) == "turns 5.3° short per full turn"
    assert consequence.width_words(-0.015) == "turns 5.5° too far per full turn"
    assert consequence.width_words(0.001) == "turns 0.36° short per full turn"


def test_no_deviation_says_that_the_vehicle_drives_true() -> None:
    assert consequence.consequence("tick_factor", 0.0, 1.0) == "drives true to length"
    assert consequence.consequence("side_ratio", 0.0, 1.0) == "drives straight"
    assert consequence.consequence("width", 0.0, 1.0) == "turns true"


def test_a_turn_too_large_for_a_side_offset_is_said_as_a_turn() -> None:
    assert consequence.side_ratio_words(-0.2, 0.5) == "curves right by 229.2° in 10 m"


def test_each_quantity_answers_with_its_own_words() -> None:
    assert consequence.consequence("tick_factor", 0.2, 1.0) == "overshoots 2,000 mm in 10 m"
    assert consequence.consequence("side_ratio", 0.002, 1.0) == "pulls left 100 mm in 10 m"
    assert consequence.consequence("width", 0.01, 1.0) == "turns 3.6° short per full turn"
