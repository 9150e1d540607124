"""Covariance of the end from noise in the rolling of each side."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.numerics.rolling_noise import noise_covariance

from .drives import Leg, Truth, drive, eight, half_loop, round_square, spin, straight, traverse

PATHS = [straight(8.0), traverse(4.0, 0.8, 5.0), half_loop(4.0, -1), spin(3), eight(1.5)]


@pytest.mark.parametrize("legs", PATHS, ids=str)
def test_the_scatter_of_stepped_ends_is_the_predicted_covariance(legs: list[Leg]) -> None:
    truth = Truth(rolling_noise_m=1e-6)
    rng = np.random.default_rng(1)
    count = 1500
    ends = np.array([drive(legs, truth, rng, rate_hz=10.0, steps_a_sample=5).end for _ in range(count)])
    plain = drive(legs, Truth(), rng, rate_hz=10.0, steps_a_sample=5)
    predicted = truth.rolling_noise_m * noise_covariance(*plain.ticks, truth.parameters)
    sd = np.sqrt(np.maximum(np.diag(predicted), 1e-12))
    measured = np.cov(ends.T)
    # A covariance of 1,500 scatters by sqrt((1 + r^2) / 1500), at most 3.7 % of the two deviations; four of those.
    assert (measured - predicted) / np.outer(sd, sd) == pytest.approx(0.0, abs=0.15)


@given(st.integers(2, 6), st.floats(-0.3, 0.3), st.floats(0.0, 0.3))
def test_the_covariance_does_not_depend_on_how_the_samples_are_cut(parts: int, turn: float, length: float) -> None:
    truth = Truth()
    left = np.full(40, (length - turn * truth.width_m / 2) / truth.left_m_per_tick)
    right = np.full(40, (length + turn * truth.width_m / 2) / truth.right_m_per_tick)
    whole = noise_covariance(left, right, truth.parameters)
    cut = noise_covariance(np.repeat(left / parts, parts), np.repeat(right / parts, parts), truth.parameters)
    sd = np.sqrt(np.diag(whole)) + 1e-9
    # Two Gauss points per sample err by its turn to the fourth over 4320, times what is integrated.
    assert (cut - whole) / np.outer(sd, sd) == pytest.approx(0.0, abs=1e-7 + 1e-3 * turn**4)


@pytest.mark.parametrize("legs", PATHS, ids=str)
def test_the_covariance_is_symmetric_and_nowhere_negative(legs: list[Leg]) -> None:
    run = drive(legs, Truth(), np.random.default_rng(2))
    covariance = noise_covariance(*run.ticks, Truth().parameters)
    assert np.array_equal(covariance, covariance.T)
    sd = np.sqrt(np.diag(covariance)) + 1e-15
    assert np.linalg.eigvalsh(covariance / np.outer(sd, sd)).min() > -1e-12


def test_noise_grows_with_the_distance_rolled_even_where_the_drive_comes_home() -> None:
    once = noise_covariance(*drive(spin(1), Truth(), np.random.default_rng(3)).ticks, Truth().parameters)
    both = drive(spin(1), Truth(), np.random.default_rng(3)).ticks
    there_and_back = [np.concatenate([side, -side]) for side in both]
    assert noise_covariance(there_and_back[0], there_and_back[1], Truth().parameters)[2, 2] == pytest.approx(
        2 * once[2, 2]
    )


def test_a_mirrored_run_has_the_mirrored_covariance() -> None:
    truth = Truth()
    left, right = drive(round_square(3.0, 0.8, 1), truth, np.random.default_rng(4)).ticks
    one = noise_covariance(left, right, truth.parameters)
    other = noise_covariance(right, left, truth.parameters[[1, 0, 2]])
    mirror = np.diag([1.0, -1.0, -1.0])
    assert other == pytest.approx(mirror @ one @ mirror, rel=1e-9, abs=1e-12)


def test_standing_still_adds_no_noise() -> None:
    assert noise_covariance(np.zeros(5), np.zeros(5), Truth().parameters) == pytest.approx(0.0)
