"""The alerts that follow from a look at a vehicle."""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta

import pytest

from registry.procedures.adoption import withdraw
from registry.procedures.alerting import acknowledge
from registry.procedures.intake import set_aside
from registry.services import Services
from tests.conftest import StandingClock
from tests.numerics.drives import straight
from tests.procedures.drives_on_record import (
    APPROVER,
    TECHNICIAN,
    TRUTH,
    DrivenVehicle,
    registered,
)
from tests.procedures.looks import (
    MakeCalibrated,
    all_alerts,
    boot_on,
    condition,
    enter,
    found,
    held,
    look,
    open_alerts,
    proposed,
    replace_sides,
    standing,
)


def test_an_alert_follows_the_evidence_and_keeps_its_first_words(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=5)
    driven.change(left=0.01, right=0.01)
    driven.work(5)
    found(driven)
    first = open_alerts(driven)["beyond_tolerance:tick_factor"]
    raised_at = driven.clock()
    driven.change(left=0.01, right=0.01)
    driven.work(5)
    found(driven)
    later = open_alerts(driven)["beyond_tolerance:tick_factor"]
    assert (later.alert_id, later.raised_at, later.updated_at) == (first.alert_id, raised_at, driven.clock())
    assert later.content.size == pytest.approx(0.0201, abs=0.002)
    (told,) = (one for one in all_alerts(driven) if one.alert_id == first.alert_id)
    assert [event.what for event in told.history] == ["raised", "updated"]
    assert told.history[0].content == first.content


@pytest.mark.parametrize("seen", [False, True])
def test_evidence_returns_an_alert_nobody_has_seen_and_closes_one_that_was(
    make_calibrated: MakeCalibrated, seen: bool
) -> None:
    driven = make_calibrated(window_runs=5)
    driven.change(left=0.01, right=0.01)
    driven.work(5)
    found(driven)
    alert = open_alerts(driven)["beyond_tolerance:tick_factor"]
    if seen:
        acknowledge(driven.services, TECHNICIAN, alert.alert_id, "looking at it")
        assert condition(driven) == "questioned"
    driven.truth = TRUTH
    driven.work(5)
    evaluation = found(driven)
    assert evaluation.result.finding == "within"
    (now,) = (one for one in all_alerts(driven) if one.alert_id == alert.alert_id)
    assert now.standing == ("closed" if seen else "returned")
    assert now.history[-1].note == evaluation.result.message
    assert condition(driven) == "good"
    if not seen:
        acknowledge(driven.services, TECHNICIAN, alert.alert_id, None)
        assert open_alerts(driven) == {}


def test_an_alert_that_had_returned_is_raised_again_as_the_same(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=5)
    states = []
    for truth in (replace_sides(0.01), TRUTH, replace_sides(0.01)):
        driven.truth = truth
        driven.work(5)
        found(driven)
        states.append(open_alerts(driven)["beyond_tolerance:tick_factor"])
    assert [one.standing for one in states] == ["unacknowledged", "returned", "unacknowledged"]
    assert len({one.alert_id for one in states}) == 1


def test_runs_that_cannot_tell_leave_an_alert_as_it_stands(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=4)
    driven.change(width=0.06)
    driven.work(4)
    found(driven)
    alert = open_alerts(driven)["beyond_tolerance:width"]
    for _ in range(4):
        driven.clock.move(hours=12)
        driven.hand_in(straight(10.0))
    assert found(driven).result.width.observed is False
    assert open_alerts(driven)["beyond_tolerance:width"] == alert
    assert len(proposed(driven)) == 1


def test_alerts_and_proposals_go_when_every_run_behind_them_is_set_aside(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    handed_in = calibrated.work(5)
    found(calibrated)
    assert condition(calibrated) == "questioned"
    for run in handed_in:
        set_aside(calibrated.services, APPROVER, run.run_id, "the tape had been broken and joined")
    assert look(calibrated) is None
    assert (standing(calibrated), proposed(calibrated), condition(calibrated)) == (set(), [], "good")


def test_a_withdrawal_takes_the_alerts_on_the_withdrawn_with_it(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    calibrated.work(5)
    found(calibrated)
    withdraw(calibrated.services, APPROVER, held(calibrated).calibration_id, "never again", "nothing")
    assert standing(calibrated) == set()
    assert look(calibrated) is None
    assert (proposed(calibrated), condition(calibrated)) == ([], "nothing")


def test_silence_is_an_alert_and_a_run_ends_it(calibrated: DrivenVehicle) -> None:
    (last,) = calibrated.work(1)
    found(calibrated)
    calibrated.clock.time = last.ended_at + timedelta(days=30)
    look(calibrated)
    assert open_alerts(calibrated) == {}
    calibrated.clock.move(minutes=1)
    assert look(calibrated) is None
    alert = open_alerts(calibrated)["no_evidence"]
    assert (alert.content.priority, alert.raised_at) == ("low", calibrated.clock())
    assert alert.content.message == f"Ore tub 9: no usable run since {last.ended_at:%Y-%m-%d} (30 days)"
    calibrated.clock.move(days=3)
    look(calibrated)
    # The sentence counts days, but nobody is told every day.
    assert open_alerts(calibrated)["no_evidence"] == alert
    calibrated.work(1)
    look(calibrated)
    assert open_alerts(calibrated)["no_evidence"].standing == "returned"


def test_silence_counts_from_the_registration_where_no_run_ever_came(
    make_home: Callable[..., Services], clock: StandingClock
) -> None:
    driven = registered(make_home(silence_days=10.0), clock)
    clock.move(days=10)
    look(driven)
    assert open_alerts(driven) == {}
    clock.move(hours=1)
    look(driven)
    assert open_alerts(driven)["no_evidence"].content.message == "Ore tub 9: no usable run yet"


def test_runs_that_are_set_aside_do_not_break_the_silence(calibrated: DrivenVehicle) -> None:
    calibrated.clock.move(days=40)
    calibrated.hand_in([(0.001, 0.0)])
    look(calibrated)
    assert standing(calibrated) == {"no_evidence"}


def test_an_adopted_set_must_be_loaded_within_three_days(calibrated: DrivenVehicle) -> None:
    boot_on(calibrated, 1)
    adopted = enter(calibrated)
    assert adopted.in_force_from is not None
    calibrated.clock.time = adopted.in_force_from + timedelta(days=3)
    look(calibrated)
    assert open_alerts(calibrated) == {}
    calibrated.clock.move(minutes=1)
    look(calibrated)
    alert = open_alerts(calibrated)["not_loaded"]
    assert "still drives on number 1; number 2 is in force since" in alert.content.message
    calibrated.clock.move(days=1)
    look(calibrated)
    assert open_alerts(calibrated)["not_loaded"] == alert
    boot_on(calibrated, adopted.number)
    look(calibrated)
    assert open_alerts(calibrated)["not_loaded"].standing == "returned"
    assert condition(calibrated) == "good"


def test_a_later_adoption_starts_the_three_days_anew(calibrated: DrivenVehicle) -> None:
    boot_on(calibrated, 1)
    enter(calibrated)
    calibrated.clock.move(days=4)
    look(calibrated)
    assert standing(calibrated) == {"not_loaded"}
    enter(calibrated)
    assert standing(calibrated) == set()
    calibrated.clock.move(days=2)
    look(calibrated)
    assert standing(calibrated) == set()
    calibrated.clock.move(days=2)
    look(calibrated)
    assert "number 3 is in force" in open_alerts(calibrated)["not_loaded"].content.message


def test_a_vehicle_that_never_reports_a_boot_is_not_said_to_drive_on_something(calibrated: DrivenVehicle) -> None:
    calibrated.clock.move(days=10)
    look(calibrated)
    assert open_alerts(calibrated) == {}
