"""From which run on the parameters in force no longer fit."""

from __future__ import annotations

import numpy as np
import pytest

from registry.numerics.recent import last_break


def test_runs_that_fit_belong_together() -> None:
    assert last_break(np.random.default_rng(1).standard_normal(60)) == 0


@pytest.mark.parametrize("place", [0, 20, 58])
def test_a_single_slip_is_no_break(place: int) -> None:
    scores = np.zeros(60)
    scores[place] = 12.0
    assert last_break(scores) == 0


@pytest.mark.parametrize("since", [57, 50, 30])
def test_a_lasting_change_breaks_at_its_first_run(since: int) -> None:
    scores = np.random.default_rng(2).standard_normal(60).clip(-2.0, 2.0)
    scores[since:] += 6.0
    assert last_break(scores) == since


def test_two_bad_runs_at_the_end_are_not_enough() -> None:
    scores = np.zeros(40)
    scores[-2:] = 9.0
    assert last_break(scores) == 0


def test_a_change_with_some_good_runs_among_it_still_breaks() -> None:
    scores = np.zeros(40)
    scores[[30, 31, 33, 34, 36]] = 8.0
    assert last_break(scores) == 30


def test_quiet_vehicles_hardly_ever_break() -> None:
    rng = np.random.default_rng(3)
    assert sum(last_break(rng.standard_normal(60)) > 0 for _ in range(2000)) <= 4


def test_no_runs_have_no_break() -> None:
    assert last_break(np.zeros(0)) == 0
