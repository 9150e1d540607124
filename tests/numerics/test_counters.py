"""Counter readings to increments, impossible steps, and the mistakes that explain them."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from registry.numerics.counters import Reading, first_impossible_step, impossible_steps, increments, other_readings

from .drives import Truth, drive, square, straight


@st.composite
def logged_counters(draw: st.DrawFn) -> tuple[int, np.ndarray, np.ndarray]:
    """Bits, true signed increments (each within half the counter's range), and the readings that a counter shows."""
    bits = draw(st.integers(2, 62))
    half = 1 << (bits - 1)
    true = draw(arrays.arrays(np.int64, st.integers(1, 30), elements=st.integers(-half, half - 1)))
    start = draw(st.integers(0, (1 << bits) - 1))
    readings, now = [start], start
    for step in true.tolist():
        # Python's integers do not overflow, so that the wrap here is the definition of the counter.
        now = (now + step) % (1 << bits)
        readings.append(now)
    return bits, true, np.array(readings, dtype=np.int64)


@given(logged_counters())
def test_increments_are_recovered_through_wraps_of_any_counter_width_in_either_direction(
    case: tuple[int, np.ndarray, np.ndarray],
) -> None:
    bits, true, readings = case
    assert np.array_equal(increments(readings, bits), true.astype(np.float64))


def test_a_sixteen_bit_counter_wraps_upwards_and_downwards() -> None:
    readings = np.array([65_530, 4, 65_533, 65_535, 0])
    assert increments(readings, 16).tolist() == [10.0, -7.0, 2.0, 1.0]


@pytest.mark.parametrize("bits", [0, 63, -1])
def test_a_counter_width_out_of_range_is_refused(bits: int) -> None:
    with pytest.raises(ValueError, match="between 1 and 62 bits"):
        increments(np.array([0, 1]), bits)


def test_the_first_impossible_step_names_its_side_and_sample_and_speed() -> None:
    time_s = np.array([0.0, 0.1, 0.2, 0.5, 0.6])
    left = np.array([100.0, 100.0, 300.0, 100.0])
    right = np.array([100.0, -9000.0, 300.0, 9000.0])
    step = first_impossible_step(left, right, time_s, (0.001, 0.001), 2.0)
    assert step is not None
    assert (step.side, step.sample) == ("right", 2)
    # 9 m in 0.1 s.
    assert step.speed_m_per_s == pytest.approx(90.0)


def test_speed_is_judged_by_the_interval_that_each_step_really_took() -> None:
    left = np.array([500.0, 500.0])
    quiet = first_impossible_step(left, left, np.array([0.0, 1.0, 2.0]), (0.001, 0.001), 0.6)
    hasty = first_impossible_step(left, left, np.array([0.0, 1.0, 1.5]), (0.001, 0.001), 0.6)
    assert quiet is None
    assert hasty is not None
    assert hasty.sample == 2


def test_a_single_tick_between_two_close_readings_is_no_impossible_speed() -> None:
    one = np.array([1.0, 0.0, 1.0])
    # 1 tick of 5 mm in a millisecond would be 5 m/s.
    assert first_impossible_step(one, one, np.array([0.0, 0.001, 0.002, 0.003]), (0.005, 0.005), 1.0) is None


def _readings(ticks: np.ndarray, bits: int, start: int = 0) -> np.ndarray:
    return (start + np.concatenate([[0], np.cumsum(ticks.astype(np.int64))])) % (1 << bits)


def _others(left: np.ndarray, right: np.ndarray, bits: int, limit_ticks: float = 2000.0) -> Iterator[Reading]:
    """Other readings where a side can roll so many ticks a sample and no more."""
    time_s = np.arange(left.size, dtype=np.float64)
    found = [impossible_steps(increments(side, bits), time_s, 1.0, limit_ticks) for side in (left, right)]
    return other_readings(left, right, bits, (found[0], found[1]))


def _guess(found: list[Reading], guess: str) -> Reading:
    return next(item for item in found if item.guess == guess)


@pytest.mark.parametrize(
    ("guess", "left_factor", "right_factor"),
    [
        ("left side counted backwards", -1.0, 1.0),
        ("right side counted backwards", 1.0, -1.0),
        ("two counts for one on both sides", 2.0, 2.0),
        ("four counts for one on the right side", 1.0, 4.0),
        ("half the counts on the left side", 0.5, 1.0),
        ("a quarter of the counts on both sides", 0.25, 0.25),
    ],
)
def test_each_mistake_of_practice_is_undone_by_the_reading_that_names_it(
    guess: str, left_factor: float, right_factor: float
) -> None:
    driven = drive(square(4.0, 1), Truth(), np.random.default_rng(1))
    # Multiples of four, so that halves and quarters are whole ticks too.
    true_left, true_right = 4.0 * driven.left_ticks, 4.0 * driven.right_ticks
    left = _readings(true_left * left_factor, 32, 1 << 31)
    right = _readings(true_right * right_factor, 32, 1 << 31)
    undone = _guess(list(_others(left, right, 32)), guess)
    assert np.array_equal(undone.left_ticks, true_left)
    assert np.array_equal(undone.right_ticks, true_right)


def test_exchanged_sides_are_exchanged_back() -> None:
    driven = drive(square(2.0, -1), Truth(), np.random.default_rng(2))
    left, right = _readings(driven.right_ticks, 32, 5), _readings(driven.left_ticks, 32, 9)
    undone = _guess(list(_others(left, right, 32)), "sides exchanged")
    assert np.array_equal(undone.left_ticks, driven.left_ticks)
    assert np.array_equal(undone.right_ticks, driven.right_ticks)


def test_a_narrower_counter_than_stated_is_found_from_its_wraps() -> None:
    driven = drive(straight(30.0), Truth(), np.random.default_rng(3))
    left, right = _readings(driven.left_ticks, 16, 40_000), _readings(driven.right_ticks, 16, 50_000)
    assert np.abs(increments(left, 32)).max() > 60_000
    undone = _guess(list(_others(left, right, 32)), "counter of 16 bits, not 32")
    assert np.array_equal(undone.left_ticks, driven.left_ticks)
    assert np.array_equal(undone.right_ticks, driven.right_ticks)


def test_a_counter_started_again_from_zero_loses_only_the_step_across_the_start() -> None:
    driven = drive(straight(30.0), Truth(), np.random.default_rng(4))
    middle = driven.left_ticks.size // 2
    left, right = _readings(driven.left_ticks, 32, 900), _readings(driven.right_ticks, 32, 800)
    left[middle:] -= left[middle]
    right[middle:] -= right[middle]
    undone = _guess(list(_others(left, right, 32)), "counter started again from zero")
    lost = undone.left_ticks != driven.left_ticks
    assert np.flatnonzero(lost).tolist() == [middle - 1]
    assert undone.left_ticks[middle - 1] == 0.0


def test_a_clean_log_is_not_altered_by_looking_for_restarts() -> None:
    driven = drive(square(5.0, 1), Truth(), np.random.default_rng(5))
    left, right = _readings(driven.left_ticks, 16, 65_000), _readings(driven.right_ticks, 16, 300)
    undone = _guess(list(_others(left, right, 16)), "counter started again from zero")
    assert np.array_equal(undone.left_ticks, driven.left_ticks)
    assert np.array_equal(undone.right_ticks, driven.right_ticks)


def test_a_counter_started_again_early_is_found_though_its_step_back_is_not_yet_enormous() -> None:
    # 400 ticks a sample; the left counter stands at 4600 at sample 9 and at 0 at sample 10.
    right = 1000 + 400 * np.arange(40)
    left = np.concatenate([1000 + 400 * np.arange(10), 400 * np.arange(30)])
    undone = _guess(list(_others(left, right, 16)), "counter started again from zero")
    assert np.flatnonzero(undone.left_ticks != 400.0).tolist() == [9]
    assert undone.left_ticks[9] == 0.0
    assert np.array_equal(undone.right_ticks, np.full(39, 400.0))


def test_a_drive_back_to_a_counter_near_zero_that_is_possible_is_no_restart() -> None:
    left = np.concatenate([400 * np.arange(12), 4400 - 1500 * np.arange(1, 3)])
    undone = _guess(list(_others(left, left, 16)), "counter started again from zero")
    assert np.array_equal(undone.left_ticks, increments(left, 16))
