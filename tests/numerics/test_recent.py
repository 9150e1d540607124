"""From which run on a window belongs to another state, on drives of the stepped world."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pytest

from registry.numerics.closure import Closures
from registry.numerics.fit import Fit, fit
from registry.numerics.recent import latest_state
from registry.numerics.stacks import CountsStack

from .drives import Driven, Leg, Truth, drive, half_loop, is_spin, read_ends, spin, straight, traverse

BASE = Truth(rolling_noise_m=0.3e-6)
WORK: tuple[list[Leg], ...] = (
    half_loop(3.0, 1),
    traverse(4.0, 0.8, 4.0),
    half_loop(3.0, -1),
    straight(10.0),
    traverse(3.0, -1.1, 5.0),
)


def _window(
    count: int, truth_of: Callable[[int], Truth], seed: int, work: Sequence[list[Leg]] = WORK
) -> tuple[list[Driven], Closures, np.random.Generator]:
    rng = np.random.default_rng(seed)
    legs = [work[index % len(work)] for index in range(count)]
    driven = [drive(one, truth_of(index), rng) for index, one in enumerate(legs)]
    return driven, read_ends(driven, rng, turns_counted=[is_spin(one) for one in legs]), rng


def _look(driven: Sequence[Driven], closures: Closures) -> tuple[int, Fit]:
    stack = CountsStack([run.ticks for run in driven], np.zeros((len(driven), 2)))
    answer = fit(stack, closures, BASE.parameters)
    return latest_state(stack, closures, answer), answer


def _narrowed(driven: Sequence[Driven], closures: Closures) -> tuple[int, Fit]:
    """As a pass does: until the runs belong together."""
    begin, answer = _look(driven, closures)
    since = begin
    while begin:
        closures = closures.take(np.arange(len(closures)) >= begin)
        driven = driven[begin:]
        begin, answer = _look(driven, closures)
        since += begin
    return since, answer


@pytest.mark.parametrize("seed", range(6))
def test_quiet_runs_belong_together(seed: int) -> None:
    driven, closures, _ = _window(40, lambda _: BASE, seed)
    assert _look(driven, closures)[0] == 0


@pytest.mark.parametrize("places", [(12,), (39,), (38, 39)])
def test_one_or_two_wild_readings_part_nothing(places: tuple[int, ...]) -> None:
    driven, closures, _ = _window(40, lambda _: BASE, 11)
    measured = closures.measured.copy()
    measured[list(places), 0] += 1.0
    assert _look(driven, replace(closures, measured=measured))[0] == 0


@pytest.mark.parametrize("since", [37, 30, 20])
def test_a_step_of_one_side_is_found_at_its_first_run(since: int) -> None:
    worn = replace(BASE, left_m_per_tick=BASE.left_m_per_tick * 0.992)
    driven, closures, _ = _window(40, lambda index: worn if index >= since else BASE, 3)
    begin, answer = _narrowed(driven, closures)
    # A run that says little of the left side may stand on the wrong side of the break.
    assert abs(begin - since) <= 1
    assert abs(answer.parameters[0] / worn.left_m_per_tick - 1.0) < 4 * np.sqrt(answer.covariance_relative[0, 0])


def test_a_change_that_few_of_the_runs_can_tell_is_found_by_these() -> None:
    """Three straights to a counted turn: the straights know nothing of the width and must not outvote the turns."""
    wide = replace(BASE, width_m=BASE.width_m * 1.03)
    work = (straight(8.0), straight(8.0), spin(2.0), straight(8.0))
    driven, closures, _ = _window(40, lambda index: wide if index >= 20 else BASE, 5, work)
    begin, answer = _narrowed(driven, closures)
    assert 18 <= begin <= 22
    assert abs(answer.parameters[2] / wide.width_m - 1.0) < 4 * answer.u_quantities[2]


def test_wear_narrows_the_window_until_its_mean_no_longer_lags() -> None:
    """1.4 % over 60 runs: the whole window's mean would lag by 0.7 %."""

    def worn(index: int) -> Truth:
        share = 1.0 - 0.014 * index / 59
        return replace(
            BASE, left_m_per_tick=BASE.left_m_per_tick * share, right_m_per_tick=BASE.right_m_per_tick * share
        )

    driven, closures, _ = _window(60, worn, 7)
    begin, answer = _narrowed(driven, closures)
    last = worn(59)
    assert begin >= 30
    assert abs(answer.parameters[0] / last.left_m_per_tick - 1.0) < 0.0025


def test_three_runs_are_too_few_to_part() -> None:
    driven, closures, _ = _window(3, lambda _: BASE, 1)
    assert _look(driven, closures)[0] == 0
