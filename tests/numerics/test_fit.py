"""The fit: from closures to tick factors and width with honest uncertainty."""

from __future__ import annotations

import numpy as np
import pytest

from registry.numerics.closure import Closures
from registry.numerics.closure_map import fold
from registry.numerics.fit import Fit, Hold, fit, misclosures
from registry.numerics.kinematics import end_pose
from registry.numerics.observability import quantity_covariance, to_quantities
from registry.numerics.stacks import CountsStack, MapStack

from .drives import Session, drive, read_ends, session, spin, straight

#: Off by what a ruler and a search would leave: 0.3 % and 0.2 % on the sides, 2 % on the width.
NEARBY = np.array([1.003, 0.998, 1.02])


def _exact(given: Session, hold: Hold | None = None) -> Fit:
    start = given.truth.parameters * NEARBY
    return fit(CountsStack(given.counts, given.levers_m), given.closures, start, hold)


def _folded(given: Session, centre: np.ndarray, hold: Hold | None = None) -> Fit:
    return fit(_maps(given, centre), given.closures, centre, hold)


def _maps(given: Session, centre: np.ndarray) -> MapStack:
    return MapStack([fold(*ticks, centre) for ticks in given.counts], given.levers_m)


def _off(found: Fit, given: Session) -> np.ndarray:
    return to_quantities(found.parameters) - to_quantities(given.truth.parameters)


@pytest.mark.parametrize("seed", range(4))
def test_exact_and_folded_fits_are_equal(seed: int) -> None:
    given = session(seed)
    exact = _exact(given)
    folded = _folded(given, exact.parameters * [1.001, 0.9995, 1.004])
    assert exact.status == folded.status == "converged"
    apart = to_quantities(folded.parameters) - to_quantities(exact.parameters)
    # The maps keep the noise covariance of their centre, here a few tolerances away: it only weighs.
    assert np.abs(apart / exact.u_quantities).max() < 0.1
    assert folded.u_quantities == pytest.approx(exact.u_quantities, rel=0.05)
    recentred = _folded(given, exact.parameters)
    apart = to_quantities(recentred.parameters) - to_quantities(exact.parameters)
    # Re-centred, the bound of the maps (5 um of some 5 mm) and the settled step of u/200 are all that is left.
    assert np.abs(apart / exact.u_quantities).max() < 0.01
    assert recentred.u_quantities == pytest.approx(exact.u_quantities, rel=2e-3)
    assert recentred.rolling_noise_m == pytest.approx(exact.rolling_noise_m, rel=0.02)
    assert recentred.deviance == pytest.approx(exact.deviance, abs=0.02)


def test_a_step_out_of_the_maps_is_told() -> None:
    given = session(1)
    found = _folded(given, given.truth.parameters * [1.0, 1.0, 1.3])
    assert found.status == "outside maps"


def test_a_start_outside_the_maps_is_told() -> None:
    given = session(1)
    found = fit(_maps(given, given.truth.parameters * [1.0, 1.0, 1.3]), given.closures, given.truth.parameters)
    assert found.status == "outside maps"


def test_a_fit_without_runs_is_refused() -> None:
    given = session(1)
    with pytest.raises(ValueError, match="at least one run"):
        fit(CountsStack([], np.zeros((0, 2))), given.closures.take(np.zeros(12, dtype=bool)), given.truth.parameters)


@pytest.mark.parametrize("seed", range(3))
def test_the_end_of_the_iteration_does_not_depend_on_its_start(seed: int) -> None:
    given = session(seed)
    stack = CountsStack(given.counts, given.levers_m)
    ends = [
        fit(stack, given.closures, given.truth.parameters * factors)
        for factors in ([1, 1, 1], [1.01, 1.01, 1.03], [0.99, 1.0, 0.97])
    ]
    for other in ends[1:]:
        apart = to_quantities(other.parameters) - to_quantities(ends[0].parameters)
        assert np.abs(apart / ends[0].u_quantities).max() < 0.02


def test_residuals_are_the_misclosures_by_the_fitted_parameters() -> None:
    given = session(2)
    found = _exact(given)
    for index, ticks in enumerate(given.counts):
        end = end_pose(*ticks, found.parameters).pose
        assert found.residual[index, :2] == pytest.approx(given.closures.measured[index, :2] - end[:2], abs=1e-9)
        off = np.exp(1j * (given.closures.measured[index, 2] - end[2]))
        assert np.exp(1j * found.residual[index, 2]) == pytest.approx(off, abs=1e-9)
    assert found.residual[:, 3].tolist() == [0.0] * 12
    stack = CountsStack(given.counts, given.levers_m)
    assert misclosures(stack, given.closures, found.parameters) == pytest.approx(found.residual, abs=1e-12)
    before = misclosures(stack, given.closures, given.truth.parameters * NEARBY)
    assert np.sqrt((before[:, :2] ** 2).mean()) > 5 * np.sqrt((found.residual[:, :2] ** 2).mean())


@pytest.mark.parametrize("victim", [0, 4, 9])
def test_a_reading_one_metre_wrong_in_one_of_twelve_runs_moves_nothing_by_more_than_one_u(victim: int) -> None:
    for seed in range(3):
        given = session(seed)
        clean = _exact(given)
        given.closures.measured[victim, 0] += 1.0
        spoiled = _exact(given)
        apart = to_quantities(spoiled.parameters) - to_quantities(clean.parameters)
        assert spoiled.status == "converged"
        assert np.abs(apart / clean.u_quantities).max() < 1.2
        assert np.abs(_off(spoiled, given) / spoiled.u_quantities).max() < 4.0
        assert spoiled.weight[victim] < 0.01
        assert spoiled.normalised[victim] > 3.5
        assert int(np.argmax(spoiled.normalised)) == victim
        # One reading is not taken for noise either: the rolling noise stays of its order.
        assert spoiled.rolling_noise_m < 4 * clean.rolling_noise_m + 1e-6


def test_good_runs_keep_their_full_weight() -> None:
    weights = np.concatenate([_exact(session(seed)).weight for seed in range(6)])
    # Beyond a normal score of two are 2.3 % of good runs.
    assert (weights == 1.0).mean() > 0.9
    assert weights.min() > 0.3


@pytest.mark.parametrize("seed", range(3))
def test_the_influence_of_a_run_is_what_the_answer_would_be_without_it(seed: int) -> None:
    given = session(seed)
    found = _exact(given)
    u, kept_noise = np.sqrt(np.diag(found.covariance_relative)), 0
    for left_out in range(12):
        rest = np.arange(12) != left_out
        counts = [ticks for ticks, kept in zip(given.counts, rest, strict=True) if kept]
        without = fit(CountsStack(counts, np.zeros((11, 2))), given.closures.take(rest), found.parameters)
        truly = np.log(without.parameters / found.parameters)
        # At the same noise variance: where a run tells most of it, everything else is weighed anew without it.
        same_noise = 0.6 < without.rolling_noise_m / found.rolling_noise_m < 1.7
        assert not same_noise or np.abs((found.influence[left_out] - truly) / u).max() < 0.35
        kept_noise += same_noise
    assert kept_noise >= 10


def test_what_is_held_stays_and_passes_its_covariance_on() -> None:
    given = session(5)
    truth = to_quantities(given.truth.parameters)
    free = _exact(given)
    u_scale = 0.002
    hold = Hold(np.array([True, False, False]), truth + np.array([0.004, 0, 0]), np.diag([u_scale**2, 0, 0]))
    held = _exact(given, hold)
    assert held.status == "converged"
    quantities = to_quantities(held.parameters)
    assert quantities[0] == pytest.approx(truth[0] + 0.004, abs=1e-12)
    assert held.u_quantities[0] == pytest.approx(u_scale)
    # A scale 0.4 % too long asks for a wider vehicle, and the width's uncertainty knows of it.
    assert quantities[2] - truth[2] == pytest.approx(0.004, abs=4 * free.u_quantities[2])
    assert held.u_quantities[2] == pytest.approx(np.hypot(free.u_quantities[2], u_scale), rel=0.3)
    assert held.covariance[0, 2] > 0.8 * u_scale**2
    assert np.linalg.eigvalsh(held.covariance).min() > 0.0


def test_with_everything_held_only_the_noise_is_estimated() -> None:
    given = session(5)
    truth = to_quantities(given.truth.parameters)
    held = _exact(given, Hold(np.ones(3, dtype=bool), truth, np.diag([1e-8, 2e-8, 3e-8])))
    assert held.status == "converged"
    assert held.parameters == pytest.approx(given.truth.parameters, rel=1e-12)
    assert held.covariance == pytest.approx(np.diag([1e-8, 2e-8, 3e-8]))
    assert held.influence == pytest.approx(0.0)
    assert 0.2 < held.rolling_noise_m / given.truth.rolling_noise_m < 5.0


def test_held_quantities_that_the_runs_contradict_show_in_the_misclosures() -> None:
    given = session(6)
    truth = to_quantities(given.truth.parameters)
    right = _exact(given, Hold(np.array([False, False, True]), truth, np.zeros((3, 3))))
    wrong = _exact(given, Hold(np.array([False, False, True]), truth + np.array([0, 0, 0.02]), np.zeros((3, 3))))
    assert wrong.deviance > right.deviance + 50


def test_rolling_noise_is_found_on_average() -> None:
    q = np.array([_exact(session(seed)).rolling_noise_m for seed in range(24)]) / 0.49e-6
    # Each is known to some 50 %; the expectation of half of it pulls a little.
    assert np.median(q) == pytest.approx(1.0, abs=0.3)
    assert q.min() > 0.1
    assert q.max() < 4.0


def test_spread_from_run_to_run_is_found_when_it_is_there() -> None:
    spreads, offs = [], []
    for seed in range(12):
        given = session(seed, repeats=4, spread=(0.002, 0.0006, 0.006))
        found = _folded(given, given.truth.parameters)
        spreads.append(found.spread)
        offs.append(_off(found, given) / found.u_quantities)
    assert min(spreads) > 0.0
    assert np.mean(spreads) == pytest.approx(0.002, rel=0.15)
    # The uncertainty carries it: without it, the scale would be off by several u.
    assert np.sqrt(np.mean(np.square(offs), axis=0)).max() < 1.8


def test_spread_is_not_invented_where_there_is_none() -> None:
    found = [_folded(given, given.truth.parameters) for given in (session(s) for s in range(100, 180))]
    with_spread = np.array([item.spread > 0.0 for item in found])
    # The score test has a level of 5 %: of 80 vehicles 4, and with three standard deviations of that at most 10.
    assert with_spread.sum() <= 10
    # Of the 95 % without, none is a false alarm by size either.
    assert max(item.spread for item in found) < 0.004


def test_a_handful_of_runs_never_asks_for_spread() -> None:
    given = session(3, spread=(0.004, 0.0012, 0.012))
    few = np.arange(12) < 7
    found = fit(CountsStack(given.counts[:7], np.zeros((7, 2))), given.closures.take(few), given.truth.parameters)
    assert found.spread == 0.0


def test_closures_that_scatter_more_than_stated_still_give_an_honest_uncertainty() -> None:
    """Stated four times too well, the rest of the scatter is found as rolling noise, spread or Birge ratio."""
    rng = np.random.default_rng(8)
    truth = session(1).truth
    runs = [drive(straight(1.5), truth, rng) for _ in range(7)]
    honest = read_ends(runs, rng, position_sd_m=0.004, heading_sd_rad=0.004)
    overconfident = Closures(honest.measured, honest.present, honest.variance / 16.0, honest.turns_counted)
    stack = CountsStack([run.ticks for run in runs], np.zeros((7, 2)))
    one, other = (fit(stack, closures, truth.parameters) for closures in (honest, overconfident))
    assert np.all(other.u_quantities[:2] > 0.6 * one.u_quantities[:2])
    assert np.all(other.u_quantities[:2] < 4.0 * one.u_quantities[:2])
    off = to_quantities(other.parameters) - to_quantities(truth.parameters)
    assert np.abs(off / other.u_quantities)[:2].max() < 3.0


def test_with_as_many_readings_as_unknowns_there_is_no_birge_ratio() -> None:
    given = session(1)
    one = np.arange(12) == 9
    found = fit(CountsStack([given.counts[9]], np.zeros((1, 2))), given.closures.take(one), given.truth.parameters)
    assert found.birge_ratio is None
    assert found.coverage_factor == pytest.approx(12.706, abs=1e-3)


def test_the_coverage_factor_is_students_and_falls_with_more_runs() -> None:
    few, many = _exact(session(1)), _folded(session(1, repeats=5), session(1).truth.parameters)
    assert many.degrees_of_freedom > few.degrees_of_freedom
    assert 1.96 < many.coverage_factor < few.coverage_factor < 2.4


def test_the_covariance_of_the_sides_follows_from_that_of_the_quantities() -> None:
    found = _exact(session(4))
    relative = found.covariance_relative
    assert quantity_covariance(relative, found.parameters) == pytest.approx(found.covariance, rel=1e-9)
    assert np.linalg.eigvalsh(relative).min() > 0.0
    # The tick factor is the mean of the sides.
    mean = np.array([0.5, 0.5])
    assert mean @ relative[:2, :2] @ mean == pytest.approx(found.covariance[0, 0], rel=0.02)


def test_only_distances_and_only_counted_turns_still_give_what_they_can() -> None:
    rng = np.random.default_rng(12)
    truth = session(7).truth
    courses = [straight(length) for length in (6.0, 9.0, 12.0, 15.0)] + [spin(4), spin(-4)]
    runs = [drive(legs, truth, rng) for legs in courses]
    closures = read_ends(runs, rng, turns_counted=[False] * 4 + [True] * 2)
    closures.measured[:4, 3] = np.hypot(closures.measured[:4, 0], closures.measured[:4, 1])
    closures.variance[:4, 3] = 25e-6
    closures.present[:4] = [False, False, False, True]
    closures.present[4:] = [False, False, True, False]
    found = fit(
        CountsStack([run.ticks for run in runs], np.zeros((6, 2))), closures, truth.parameters * [1.002, 1.002, 1.02]
    )
    off = to_quantities(found.parameters) - to_quantities(truth.parameters)
    assert found.status == "converged"
    assert found.u_quantities[[0, 2]].max() < 0.002
    assert np.abs(off[[0, 2]] / found.u_quantities[[0, 2]]).max() < 3.0
    assert found.u_quantities[1] > 0.002


def test_a_mark_off_the_axle_gives_the_same_parameters() -> None:
    rng = np.random.default_rng(14)
    truth = session(8).truth
    with_lever = type(truth)(*truth.parameters, truth.rolling_noise_m, (0.4, -0.15))
    courses = [straight(10.0)] * 3 + [[(3.0, 0.0), (0.0, 1.2), (4.0, 0.0)], [(4.0, 0.0), (0.0, -1.0), (3.0, 0.0)]] * 2
    runs = [drive(legs, with_lever, rng) for legs in courses]
    closures = read_ends(runs, rng)
    counts, levers = [run.ticks for run in runs], np.tile(with_lever.lever_m, (len(runs), 1))
    right = fit(CountsStack(counts, levers), closures, truth.parameters * NEARBY)
    off = (to_quantities(right.parameters) - to_quantities(truth.parameters)) / right.u_quantities
    assert np.abs(off).max() < 3.0
    folded = fit(MapStack([fold(*ticks, right.parameters) for ticks in counts], levers), closures, right.parameters)
    apart = to_quantities(folded.parameters) - to_quantities(right.parameters)
    assert np.abs(apart / right.u_quantities).max() < 0.02
    wrong = fit(CountsStack(counts, np.zeros((len(runs), 2))), closures, truth.parameters * NEARBY)
    assert wrong.deviance > right.deviance + 50


def test_straight_distances_alone_come_to_rest_though_the_side_ratio_acts_by_its_square() -> None:
    """Gauss-Newton steps overshoot in a hollow of fourth order, and would swing about it without end."""
    truth, statuses = session(9).truth, []
    for seed in range(30):
        rng = np.random.default_rng(seed)
        runs = [drive(straight(length), truth, rng, rate_hz=5.0) for length in rng.uniform(15.0, 30.0, 10)]
        closures = read_ends(runs, rng, position_sd_m=0.003)
        closures.present[:] = [True, False, False, False]
        stack = CountsStack([run.ticks for run in runs], np.zeros((10, 2)))
        found = fit(stack, closures, truth.parameters * np.array([1.002, 0.999, 1.0]))
        statuses.append(found.status)
        assert found.u_quantities[0] < 0.001
    assert statuses.count("converged") >= 29
