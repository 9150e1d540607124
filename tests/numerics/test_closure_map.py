"""Folded runs: the same end and the same slopes as the counts themselves, inside the box."""

from __future__ import annotations

import dataclasses
import tracemalloc
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from registry.numerics import closure_map
from registry.numerics.closure_map import decode, encode, fold
from registry.numerics.kinematics import end_pose
from registry.numerics.rolling_noise import noise_covariance
from registry.numerics.stacks import CountsStack, MapStack

from .drives import Float, Truth, drive, eight, half_loop, round_square, spin, straight, traverse

CENTRE = Truth().parameters
NO_LEVER = np.zeros((1, 2))


def _in_box(item: closure_map.ClosureMap, common: float, difference: float, width_change: float = 0.0) -> Float:
    """Parameters at a place of the box, in half widths, at another width: the box is in ticks over width."""
    a, b = item.centre[:2] / item.centre[2]
    width = item.centre[2] * (1 + width_change)
    s, d = common * item.half_width[0], difference * item.half_width[1]
    return np.array([a * (1 + s - d) * width, b * (1 + s + d) * width, width])


@st.composite
def logs(draw: st.DrawFn) -> tuple[Float, Float]:
    """Whole ticks of runs from 1 m to 5 km and from no turn to 500 turns, driven one way, swinging, or at random."""
    length_m = 10 ** draw(st.floats(0.0, 3.7))
    turns = draw(st.one_of(st.just(0.0), st.floats(-2.0, 2.7).map(lambda power: 10**power)))
    count = draw(st.integers(20, 3000))
    kind = draw(st.sampled_from(["one way", "swinging", "random", "back and forth"]))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    phase = np.arange(count) / count
    shape = {
        "one way": np.ones(count),
        "swinging": np.sin(2 * np.pi * 3 * phase),
        "random": rng.standard_normal(count),
        "back and forth": np.where(phase < 0.5, 1.0, -1.0),
    }[kind]
    turn = 2 * np.pi * turns * shape / np.abs(shape).sum()
    advance = np.full(count, length_m / count) * (np.sign(0.6 - phase) if kind == "back and forth" else 1.0)
    left = np.round((advance - turn * CENTRE[2] / 2) / CENTRE[0])
    right = np.round((advance + turn * CENTRE[2] / 2) / CENTRE[1])
    return left, right


PLACES = st.floats(-1.0, 1.0)


@settings(max_examples=60, deadline=None)
@given(logs(), PLACES, PLACES, st.floats(-0.3, 0.3))
def test_a_folded_run_ends_where_its_counts_end_within_the_stated_bound(
    ticks: tuple[Float, Float], common: float, difference: float, width_change: float
) -> None:
    item = fold(*ticks, CENTRE)
    assert item.error_m <= closure_map.WANTED_ERROR_M
    for place in ((common, difference), (np.sign(common), np.sign(difference))):
        parameters = _in_box(item, *place, width_change)
        exact = end_pose(*ticks, parameters)
        folded = MapStack([item], NO_LEVER).predict(parameters)
        rolled_m = float(CENTRE[0] * np.abs(ticks[0]).sum() + CENTRE[1] * np.abs(ticks[1]).sum())
        # The bound is at the centre's width, and the position scales with the width; rounding of the phases beside it.
        rounding_m = 1e-15 * rolled_m * (1 + rolled_m / CENTRE[2])
        away_m = np.hypot(*(folded.pose[0] - exact.pose)[:2])
        assert away_m <= item.error_m * (1 + width_change) + rounding_m
        assert folded.pose[0, 2] == pytest.approx(exact.pose[2], abs=1e-12 * (1 + rolled_m / CENTRE[2]))
        # A slope is the change of the end for a relative change of one: a millionth of the way rolled is plenty.
        slope_error_m = np.abs((folded.jacobian[0] - exact.jacobian)[:2] * parameters).max()
        assert slope_error_m <= 2e-6 * rolled_m + 1e-6
        # The heading's slopes are exact.
        heading_slopes = (folded.jacobian[0, 2] - exact.jacobian[2]) * parameters
        assert heading_slopes == pytest.approx(0.0, abs=1e-12 * (1 + rolled_m / CENTRE[2]))


@pytest.mark.parametrize(("samples", "turns"), [(12_000, 190.0), (12_000, 500.0), (2_000, 30.0)])
def test_samples_that_turn_far_on_a_long_run_are_counted_in_the_bound(samples: int, turns: float) -> None:
    """Five kilometres with every sample turning at random: two points a sample are not enough without cutting."""
    turn = np.random.default_rng(0).standard_normal(samples)
    turn *= 2 * np.pi * turns / np.abs(turn).sum()
    left = np.round((5000.0 / samples - turn * CENTRE[2] / 2) / CENTRE[0])
    right = np.round((5000.0 / samples + turn * CENTRE[2] / 2) / CENTRE[1])
    item = fold(left, right, CENTRE)
    assert item.error_m <= closure_map.WANTED_ERROR_M
    for common, difference in ((0.0, 0.0), (1.0, -1.0), (-0.4, 0.9)):
        parameters = _in_box(item, common, difference)
        away = MapStack([item], NO_LEVER).predict(parameters).pose[0] - end_pose(left, right, parameters).pose
        # Rounding of phases of 16,000 rad on 5 km is 1e-8 m.
        assert np.hypot(*away[:2]) <= item.error_m + 1e-8


@settings(max_examples=25, deadline=None)
@given(logs(), PLACES, PLACES)
def test_the_slopes_of_a_folded_run_are_the_differences_of_its_own_ends(
    ticks: tuple[Float, Float], common: float, difference: float
) -> None:
    item = fold(*ticks, CENTRE)
    stack = MapStack([item], NO_LEVER)
    parameters = _in_box(item, 0.9 * common, 0.9 * difference)
    jacobian = stack.predict(parameters).jacobian[0] * parameters
    h = 1e-3 * float(item.half_width.min())
    rolled_m = float(CENTRE[0] * np.abs(ticks[0]).sum() + CENTRE[1] * np.abs(ticks[1]).sum())
    for column in range(3):
        near = []
        for sign in (-2.0, -1.0, 1.0, 2.0):
            moved = parameters.copy()
            moved[column] *= 1 + sign * h
            near.append(stack.predict(moved).pose[0])
        slope = (near[0] - 8 * near[1] + 8 * near[2] - near[3]) / (12 * h)
        assert jacobian[:, column] == pytest.approx(
            slope, abs=1e-9 * (1 + rolled_m) * (1 + rolled_m / CENTRE[2]) + 1e-14 * rolled_m / h
        )


@pytest.mark.parametrize("wanted_m", [1e-3, 1e-6, 1e-9])
def test_the_wanted_error_is_met_and_costs_the_fewest_terms(wanted_m: float) -> None:
    run = drive(round_square(20.0, 1.5, 1), Truth(), np.random.default_rng(1))
    item = fold(*run.ticks, CENTRE, wanted_m)
    assert item.error_m <= wanted_m
    looser = fold(*run.ticks, CENTRE, 1000 * wanted_m)
    assert looser.coefficients.size < item.coefficients.size
    parameters = _in_box(item, 0.7, -0.8)
    away = MapStack([item], NO_LEVER).predict(parameters).pose[0] - end_pose(*run.ticks, parameters).pose
    assert np.hypot(*away[:2]) <= item.error_m + 1e-12


def test_the_box_is_as_wide_as_eight_radians_of_phase_and_at_most_eight_and_one_percent() -> None:
    short = fold(*drive(straight(3.0), Truth(), np.random.default_rng(2)).ticks, CENTRE)
    assert short.half_width.tolist() == [0.08, 0.01]
    long_ticks = [
        np.tile(side, 40) for side in drive(round_square(20.0, 1.5, 1), Truth(), np.random.default_rng(2)).ticks
    ]
    long = fold(long_ticks[0], long_ticks[1], CENTRE)
    turned = np.abs(CENTRE[1] * np.cumsum(long_ticks[1]) - CENTRE[0] * np.cumsum(long_ticks[0])).max() / CENTRE[2]
    rolled = np.abs(CENTRE[1] * np.cumsum(long_ticks[1]) + CENTRE[0] * np.cumsum(long_ticks[0])).max() / CENTRE[2]
    assert long.half_width == pytest.approx([8.0 / turned, 8.0 / rolled])


def test_the_box_says_what_is_inside_for_each_run() -> None:
    rng = np.random.default_rng(3)
    maps = [fold(*drive(legs, Truth(), rng).ticks, CENTRE) for legs in (straight(3.0), spin(40))]
    stack = MapStack(maps, np.zeros((2, 2)))
    assert stack.inside(CENTRE).tolist() == [True, True]
    assert stack.inside(CENTRE * [1.05, 1.05, 1.0]).tolist() == [True, False]
    assert stack.inside(CENTRE * [1.05, 1.05, 1.05]).tolist() == [True, True]
    assert stack.inside(CENTRE * [1.0, 1.03, 1.0]).tolist() == [False, False]


@pytest.mark.parametrize(
    "legs", [straight(12.0), half_loop(8.0, 1), spin(-4), eight(2.0), traverse(4, 0.8, 5)], ids=str
)
def test_a_stack_of_maps_predicts_what_a_stack_of_counts_predicts_at_any_mark(legs: list[tuple[float, float]]) -> None:
    rng = np.random.default_rng(4)
    counts = [drive(legs, Truth(), rng).ticks, drive(straight(5.0), Truth(), rng).ticks]
    levers = np.array([[0.4, -0.2], [0.0, 0.0]])
    maps = MapStack([fold(*ticks, CENTRE) for ticks in counts], levers)
    exact = CountsStack(counts, levers)
    parameters = CENTRE * [1.004, 0.998, 1.03]
    one, other = maps.predict(parameters), exact.predict(parameters)
    assert one.pose == pytest.approx(other.pose, abs=closure_map.WANTED_ERROR_M)
    assert one.pose == pytest.approx(exact.poses(parameters), abs=closure_map.WANTED_ERROR_M)
    assert (one.jacobian - other.jacobian) * parameters == pytest.approx(0.0, abs=1e-4)
    # The covariance is kept at the centre. Near it, it turns with the end of the path: 0.04 % of side ratio over 12 m
    # and a width of 0.62 m is 0.008 rad, on an ellipse that is twenty times as long as wide.
    near = CENTRE * [1.0002, 0.9998, 1.001]
    one, other = maps.predict(near), exact.predict(near)
    sd = np.sqrt(np.einsum("nii->ni", other.noise))
    assert (one.noise - other.noise) / (sd[:, :, None] * sd[:, None, :]) == pytest.approx(0.0, abs=0.15)


def test_the_covariance_at_the_centre_is_that_of_the_counts() -> None:
    ticks = drive(half_loop(6.0, -1), Truth(), np.random.default_rng(5)).ticks
    assert fold(*ticks, CENTRE).noise == pytest.approx(noise_covariance(*ticks, CENTRE), rel=1e-12)


def test_samples_at_standstill_change_nothing() -> None:
    ticks = drive(half_loop(6.0, -1), Truth(), np.random.default_rng(6)).ticks
    with_rests = [np.insert(side, slice(0, side.size, 5), 0.0) for side in ticks]
    one, other = fold(*ticks, CENTRE), fold(with_rests[0], with_rests[1], CENTRE)
    assert other.coefficients == pytest.approx(one.coefficients, abs=1e-13)
    assert other.noise == pytest.approx(one.noise, rel=1e-12)


def test_a_run_that_never_moved_folds_to_its_start() -> None:
    item = fold(np.zeros(20), np.zeros(20), CENTRE)
    prediction = MapStack([item], NO_LEVER).predict(CENTRE)
    assert prediction.pose.tolist() == [[0.0, 0.0, 0.0]]
    assert prediction.jacobian == pytest.approx(0.0)
    assert item.error_m == 0.0


def test_the_chunk_of_samples_held_in_memory_changes_only_rounding(monkeypatch: pytest.MonkeyPatch) -> None:
    ticks = drive(round_square(20.0, 1.5, 1), Truth(), np.random.default_rng(7)).ticks
    whole = fold(*ticks, CENTRE)
    monkeypatch.setattr(closure_map, "_CHUNK", 97)
    assert fold(*ticks, CENTRE).coefficients == pytest.approx(whole.coefficients, abs=1e-12)


def test_folding_a_run_a_hundred_times_longer_needs_little_more_than_its_counts() -> None:
    left = np.full(400_000, 50.0)
    right = left + np.round(20 * np.sin(np.arange(left.size) / 900))
    tracemalloc.start()
    try:
        fold(left, right, CENTRE)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    # Some twenty arrays as long as the counts; the phase factors of all samples and nodes would be 300 MB.
    assert peak < 40 * left.nbytes


@settings(max_examples=30, deadline=None)
@given(logs())
def test_a_map_comes_back_from_its_bytes_to_the_last_bit(ticks: tuple[Float, Float]) -> None:
    item = fold(*ticks, CENTRE)
    back = decode(encode(item))
    for field in dataclasses.fields(item):
        assert np.array_equal(getattr(item, field.name), getattr(back, field.name)), field.name
    assert encode(back) == encode(item)


def test_a_usual_run_takes_a_few_kilobytes() -> None:
    run = drive(round_square(20.0, 1.5, 1), Truth(), np.random.default_rng(8))
    assert len(encode(fold(*run.ticks, CENTRE))) < 6000


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda blob: blob[:0], "version 1"),
        (lambda blob: blob[:50], "version 1"),
        (lambda blob: b"\x02" + blob[1:], "version 1"),
        (lambda blob: b"{" + blob[1:], "version 1"),
        (lambda blob: blob[:-1], "wrong length"),
        (lambda blob: blob + b"\x00", "wrong length"),
        (lambda blob: blob[:1] + b"\xff" + blob[2:], "wrong length"),
        (lambda blob: blob[:1] + b"\x00\x00" + blob[3:136], "wrong length"),
        (lambda blob: blob[:8] + np.array([np.nan]).tobytes() + blob[16:], "not finite"),
        (lambda blob: blob[:-8] + np.array([np.inf]).tobytes(), "not finite"),
    ],
)
def test_bytes_that_are_no_map_are_refused(spoil: Callable[[bytes], bytes], words: str) -> None:
    blob = encode(fold(*drive(straight(3.0), Truth(), np.random.default_rng(9)).ticks, CENTRE))
    with pytest.raises(ValueError, match=words):
        decode(spoil(blob))
