"""Within, uncertain or beyond."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.numerics.conformity import decide, probability_beyond

VALUES = st.floats(-5.0, 5.0)
PROBABILITIES = st.floats(0.0, 1.0)


@given(VALUES, st.floats(1e-3, 10.0))
def test_the_probability_is_the_same_on_both_sides_of_a_symmetric_tolerance(value: float, u: float) -> None:
    assert probability_beyond(value, u, -1.0, 1.0) == pytest.approx(probability_beyond(-value, u, -1.0, 1.0))


@given(st.floats(0.0, 4.0), st.floats(0.01, 1.0), st.floats(1e-3, 10.0))
def test_further_out_is_more_probably_beyond(value: float, more: float, u: float) -> None:
    assert probability_beyond(value + more, u, -1.0, 1.0) >= probability_beyond(value, u, -1.0, 1.0)


def test_an_estimate_on_a_limit_that_it_knows_well_is_beyond_with_one_half() -> None:
    assert probability_beyond(1.0, 1e-3, -1.0, 1.0) == pytest.approx(0.5)


def test_small_probabilities_keep_their_digits() -> None:
    # Eight standard uncertainties inside on either side: 2 x 6.2e-16, which one minus the middle would lose.
    assert probability_beyond(0.0, 0.125, -1.0, 1.0) == pytest.approx(1.244192e-15, rel=1e-5, abs=0.0)


def test_one_sided_limits_are_infinite() -> None:
    assert probability_beyond(1.0, 1.0, -math.inf, 1.0) == pytest.approx(0.5)
    assert probability_beyond(-1.0, 1.0, -1.0, math.inf) == pytest.approx(0.5)


@pytest.mark.parametrize("u", [0.0, -1.0, math.nan])
def test_an_uncertainty_that_is_not_above_zero_is_refused(u: float) -> None:
    with pytest.raises(ValueError, match="above zero"):
        probability_beyond(0.0, u, -1.0, 1.0)


def test_an_empty_tolerance_is_refused() -> None:
    with pytest.raises(ValueError, match="empty"):
        probability_beyond(0.0, 1.0, 1.0, 1.0)


@given(PROBABILITIES)
def test_a_first_decision_acts_at_95_and_watches_at_50_percent(probability: float) -> None:
    expected = "beyond" if probability >= 0.95 else "uncertain" if probability >= 0.5 else "within"
    assert decide(probability) == expected
    assert decide(probability, "within") == expected
    assert decide(probability, "uncertain") == expected


@given(PROBABILITIES)
def test_what_was_beyond_is_cleared_at_20_percent_only(probability: float) -> None:
    expected = "beyond" if probability >= 0.95 else "uncertain" if probability > 0.2 else "within"
    assert decide(probability, "beyond") == expected
