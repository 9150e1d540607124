"""From numbers to what is said: findings, sentences, and when an alert holds."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import pytest

from registry.domain.calibration import Calibration, CalibrationResult, InForce, Observed
from registry.domain.evaluation import EvaluationResult, QuantityFinding
from registry.domain.judgement import (
    LOAD_WITHIN,
    beyond_tolerance,
    finding_of,
    holds_beyond,
    message_of,
    no_evidence,
    not_loaded,
    percent,
)
from registry.domain.maintenance import Maintenance
from registry.domain.tolerance import QUANTITIES, Quantity, Tolerance
from registry.domain.vehicle import Drive, Parameters

NOON = datetime(2026, 3, 2, 12, 0, tzinfo=UTC)
OPEN = QuantityFinding(None, None, observed=False, probability_beyond=None)


def seen(probability: float, deviation: float = 0.008, u: float = 0.0004) -> QuantityFinding:
    return QuantityFinding(deviation, u, observed=True, probability_beyond=probability)


def calibration(number: int = 4) -> Calibration:
    result = CalibrationResult(
        kind="baseline",
        parameters=Parameters(3.5e-4, 3.5e-4, 0.62),
        covariance_relative=((1e-8, 0.0, 0.0), (0.0, 1e-8, 0.0), (0.0, 0.0, 1e-8)),
        observed=Observed(tick_factor=True, side_ratio=True, width=True),
    )
    return Calibration(f"c{number}", "tub-9", number, result, "proposed", None, None, None, NOON, "schedule")


def result_of(*quantities: QuantityFinding) -> EvaluationResult:
    return EvaluationResult("c1", 9, NOON, NOON, *quantities, None, None, None, "beyond", "said")


# Findings


@pytest.mark.parametrize(
    ("probabilities", "finding"),
    [
        ((0.0, 0.1, 0.49), "within"),
        ((0.0, 0.5, 0.0), "uncertain"),
        ((0.0, 0.949, 0.0), "uncertain"),
        ((0.95, 0.0, 0.0), "beyond"),
        ((0.6, 0.0, 1.0), "beyond"),
    ],
)
def test_the_worst_quantity_decides_at_a_half_and_at_ninety_five_percent(
    probabilities: tuple[float, float, float], finding: str
) -> None:
    assert finding_of([seen(value) for value in probabilities], confirmed=True) == finding


def test_what_is_not_observed_is_not_taken_for_within() -> None:
    assert finding_of([OPEN, seen(0.2), OPEN], confirmed=True) == "cannot_tell"
    assert finding_of([OPEN, seen(0.6), OPEN], confirmed=True) == "uncertain"
    assert finding_of([OPEN, seen(0.96), OPEN], confirmed=True) == "beyond"
    assert finding_of([OPEN, OPEN, OPEN], confirmed=True) == "cannot_tell"


def test_one_run_alone_is_never_beyond() -> None:
    assert finding_of([seen(1.0), seen(0.0), OPEN], confirmed=False) == "uncertain"


# Sentences


def test_a_message_gives_every_observed_quantity_with_its_uncertainty() -> None:
    quantities = [seen(0.0, 0.00021, 0.0004), seen(0.0, -0.0001, 0.0002), seen(0.0, 0.0, 0.001)]
    assert message_of(quantities, "within", 12, confirmed=True) == (
        "Within tolerance by 12 runs: tick factor +0.02 % (u 0.04 %), side ratio -0.01 % (u 0.02 %), "
        "effective width 0.00 % (u 0.10 %)."
    )


def test_a_message_says_which_run_would_settle_what_is_open_and_gives_no_figure_of_it() -> None:
    told = message_of([seen(0.0), seen(0.0), OPEN], "within", 5, confirmed=True)
    assert "effective width +" not in told
    assert "effective width 0" not in told
    assert "These runs cannot tell effective width: turn on the spot" in told


def test_a_message_says_that_one_run_is_not_enough() -> None:
    told = message_of([seen(0.99), OPEN, OPEN], "uncertain", 2, confirmed=False)
    assert "Perhaps beyond tolerance by 2 runs" in told
    assert "It rests on one run alone; a second one must agree." in told


def test_one_run_is_one_run() -> None:
    assert message_of([OPEN] * 3, "cannot_tell", 1, confirmed=True).startswith("1 run, and none")


@pytest.mark.parametrize(
    ("value", "words"), [(0.008, "+0.80 %"), (-0.00004, "0.00 %"), (-0.0012, "-0.12 %"), (0.1, "+10.00 %")]
)
def test_relative_values_are_signed_percent(value: float, words: str) -> None:
    assert percent(value) == words


# When an alert holds


@pytest.mark.parametrize(
    ("probability", "was_open", "confirmed", "holds"),
    [
        (0.96, False, True, True),
        (0.95, False, True, True),
        (0.94, False, True, None),
        (0.99, False, False, None),
        (0.10, False, True, None),
        (0.99, True, False, True),
        (0.50, True, True, True),
        (0.21, True, True, True),
        (0.20, True, True, False),
        (0.00, True, True, False),
        (None, True, True, None),
        (None, False, False, None),
    ],
)
def test_an_alert_is_raised_at_ninety_five_percent_and_cleared_at_twenty(
    probability: float | None, was_open: bool, confirmed: bool, holds: bool | None
) -> None:
    item = OPEN if probability is None else seen(probability)
    assert holds_beyond(item, was_open=was_open, confirmed=confirmed) is holds


def test_a_probability_that_swings_within_the_dead_band_does_not_make_an_alert_chatter() -> None:
    standing, changes = False, 0
    for probability in (0.96, 0.4, 0.93, 0.25, 0.96, 0.3, 0.9):
        holds = holds_beyond(seen(probability), was_open=standing, confirmed=True)
        now = standing if holds is None else holds
        changes += now is not standing
        standing = now
    assert (changes, standing) == (1, True)


# What alerts say


def test_an_alert_on_a_deviation_says_it_in_the_words_of_the_floor() -> None:
    content = beyond_tolerance(
        "Ore tub 9", "tick_factor", result_of(seen(0.99), seen(0.0), OPEN), Tolerance(), calibration(1), calibration(5)
    )
    assert content.cause() == "beyond_tolerance:tick_factor"
    assert content.message == "Ore tub 9: tick factor is +0.80 % off what it drives on (tolerance 0.5 %)"
    assert content.consequence == "The vehicle overshoots 80 mm in 10 m."
    assert content.advice.endswith("; then decide on calibration 5, which is proposed.")
    assert (content.size, content.u, content.probability_beyond) == (0.008, 0.0004, 0.99)
    assert (content.attribution, content.shape, content.onset_at) == (None, None, None)


def test_without_a_proposal_the_advice_is_to_drive_calibration_runs() -> None:
    content = beyond_tolerance(
        "Ore tub 9", "width", result_of(OPEN, OPEN, seen(0.99, -0.02)), Tolerance(), calibration(1), None
    )
    assert content.advice.endswith("; then drive calibration runs and propose a new baseline.")
    assert "(tolerance 1.5 %)" in content.message
    assert "turns" in content.consequence


@pytest.mark.parametrize(
    ("drive", "foreign"), [("tracks", ("tyre", "pressure", "wheel")), ("wheels", ("track", "tension", "stretch"))]
)
@pytest.mark.parametrize("quantity", QUANTITIES)
def test_the_advice_looks_only_at_parts_that_the_vehicle_has(
    quantity: Quantity, drive: Drive, foreign: tuple[str, ...]
) -> None:
    result = result_of(seen(0.99), seen(0.99), seen(0.99))
    told = beyond_tolerance("Ore tub 9", quantity, result, Tolerance(), calibration(1), None, drive=drive).advice
    assert told.startswith(("Look at t", "Compare the two sides: t"))
    assert not any(word in told for word in foreign)


def test_after_work_that_awaits_a_calibration_the_deviation_is_expected_and_nobody_is_sent_to_look() -> None:
    work = Maintenance("m1", "tub-9", NOON, "track_tensioned", "both", None, True, NOON, "Tove")
    result = result_of(seen(0.99), seen(0.0), OPEN)
    content = beyond_tolerance(
        "Ore tub 9", "tick_factor", result, Tolerance(), calibration(1), calibration(5), drive="tracks", work=work
    )
    assert content.advice == (
        "Expected after the work of 2026-03-02 (track tensioned); decide on calibration 5, which is proposed."
    )


@pytest.mark.parametrize(
    ("deviation", "priority", "act_within"),
    [
        (0.0099, "medium", "this shift"),
        (0.01, "high", "before it drives"),
        (-0.02, "high", "before it drives"),
    ],
)
def test_two_tolerances_away_the_vehicle_should_not_drive(deviation: float, priority: str, act_within: str) -> None:
    content = beyond_tolerance(
        "Ore tub 9", "tick_factor", result_of(seen(1.0, deviation), OPEN, OPEN), Tolerance(), calibration(), None
    )
    assert (content.priority, content.act_within) == (priority, act_within)


def test_silence_is_told_from_the_last_run_or_from_none() -> None:
    since = no_evidence("Ore tub 9", NOON - timedelta(days=31, hours=2), NOON, 30.0)
    assert since.message == "Ore tub 9: no usable run since 2026-01-30 (31 days)"
    assert since.consequence.startswith("After 30 days without")
    assert no_evidence("Ore tub 9", None, NOON, 30.0).message == "Ore tub 9: no usable run yet"
    assert since.cause() == "no_evidence"
    assert since.onset_at == NOON - timedelta(days=31, hours=2)
    assert no_evidence("Ore tub 9", None, NOON, 30.0).onset_at is None


def test_a_set_not_loaded_is_told_by_the_numbers_on_both_sides() -> None:
    entry = InForce(3, "tub-9", "c4", 4, NOON, NOON, "Abel", "runs agree", entered_late=False)
    assert not_loaded("Ore tub 9", 3, entry).message == (
        "Ore tub 9: still drives on number 3; number 4 is in force since 2026-03-02"
    )
    assert "still drives on an unknown set;" in not_loaded("Ore tub 9", None, entry).message
    assert timedelta(days=3) == LOAD_WITHIN
