"""A start for the fit from a ruler that is far off, with headings that wrap."""

from __future__ import annotations

import numpy as np
import pytest

from registry.numerics.fit import fit
from registry.numerics.observability import to_quantities
from registry.numerics.stacks import CountsStack
from registry.numerics.start_values import find_start

from .drives import Truth, drive, half_loop, read_ends, round_square, session, spin, straight


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("ruler_share", [1 / 1.8, 1 / 1.1, 1.1, 1.6], ids=lambda share: f"ruler {share:.2f}")
def test_a_start_is_found_from_a_ruler_that_is_far_off(ruler_share: float, seed: int) -> None:
    """The effective width is 80 % or 10 % more than the ruler says, or less; closed squares and counted spins, whose
    headings wrap, and straights: at the true width alone do they all fit.
    """
    given = session(40 + seed)
    nominal = np.array([3.5e-4, 3.5e-4, given.truth.width_m * ruler_share])
    start = find_start(given.counts, given.levers_m, given.closures, nominal)
    assert start / given.truth.parameters == pytest.approx(np.ones(3), abs=0.01)
    found = fit(CountsStack(given.counts, given.levers_m), given.closures, start)
    off = to_quantities(found.parameters) - to_quantities(given.truth.parameters)
    assert found.status == "converged"
    assert np.abs(off / found.u_quantities).max() < 4.0


@pytest.mark.parametrize("seed", range(3))
def test_a_start_is_found_without_counted_turns(seed: int) -> None:
    rng = np.random.default_rng(60 + seed)
    truth = Truth(3.46e-4, 3.52e-4, 0.62 * 1.55, 0.49e-6)
    courses = [straight(10.0)] * 3 + [round_square(4.0, 0.8, 1), round_square(4.0, 0.8, -1)] * 2
    courses += [half_loop(5.0, 1), half_loop(5.0, -1)]
    runs = [drive(legs, truth, rng, rate_hz=10.0) for legs in courses]
    closures, levers = read_ends(runs, rng), np.zeros((len(runs), 2))
    start = find_start([run.ticks for run in runs], levers, closures, np.array([3.5e-4, 3.5e-4, 0.62]))
    assert start / truth.parameters == pytest.approx(np.ones(3), abs=0.01)


@pytest.mark.parametrize("ruler_share", [1 / 1.8, 1.0, 1.5], ids=lambda share: f"ruler {share:.2f}")
@pytest.mark.parametrize("seed", range(2))
def test_a_start_is_found_from_spins_whose_turns_nobody_counted(seed: int, ruler_share: float) -> None:
    """Of five turns more or less, a heading tells what is left over; loops and traverses say how many they were."""
    rng = np.random.default_rng(70 + seed)
    truth = Truth(3.46e-4, 3.52e-4, 0.9, 0.49e-6)
    courses = [straight(10.0)] * 3 + [spin(5), spin(-5), spin(5), spin(-5)]
    courses += [half_loop(4.0, 1), half_loop(4.0, -1), [(4.0, 0.0), (0.0, 0.8), (5.0, 0.0)]]
    runs = [drive(legs, truth, rng, rate_hz=10.0) for legs in courses]
    closures, levers = read_ends(runs, rng), np.zeros((len(runs), 2))
    nominal = np.array([3.5e-4, 3.5e-4, truth.width_m * ruler_share])
    start = find_start([run.ticks for run in runs], levers, closures, nominal)
    assert start / truth.parameters == pytest.approx(np.ones(3), abs=0.01)


def test_a_scale_that_is_far_off_is_found_from_the_straights() -> None:
    given = session(50)
    nominal = given.truth.parameters * [2.0, 2.0, 1.2]
    start = find_start(given.counts, given.levers_m, given.closures, nominal)
    assert start / given.truth.parameters == pytest.approx(np.ones(3), abs=0.01)


def test_one_hopeless_run_does_not_hide_the_start() -> None:
    given = session(51)
    given.closures.measured[3, :2] += [1.5, -0.8]
    nominal = np.array([3.5e-4, 3.5e-4, given.truth.width_m / 1.4])
    start = find_start(given.counts, given.levers_m, given.closures, nominal)
    assert start / given.truth.parameters == pytest.approx(np.ones(3), abs=0.02)
