"""One scheduled look at a vehicle: what it judges, finds, proposes, and what it leaves alone."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace
from datetime import datetime, timedelta

import numpy as np
import pytest

from registry.domain.alert import Alert
from registry.domain.boot import BootStatement
from registry.domain.calibration import Calibration
from registry.domain.evaluation import Evaluation
from registry.domain.person import Actor
from registry.domain.vehicle import Parameters
from registry.errors import NotFound
from registry.numerics import closure_map
from registry.procedures import proposals, upkeep
from registry.procedures.adoption import withdraw
from registry.procedures.alerting import acknowledge
from registry.procedures.baseline import propose_entered
from registry.procedures.boot_report import report_boot
from registry.procedures.evaluation import Holder, LeaseLost, evaluate_vehicle
from registry.procedures.intake import restore, set_aside
from registry.procedures.maintenance import record_maintenance
from registry.procedures.registration import put_vehicle
from registry.services import Services
from registry.settings import Settings
from registry.storage import alerts, boots, calibrations, evaluations, in_force, journal, leases, runs
from registry.storage.journal import JournalFilter
from tests.conftest import StandingClock
from tests.numerics.drives import Truth, half_loop, spin, square, straight
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
    Reading,
    meanwhile,
    registered,
)

MakeCalibrated = Callable[..., DrivenVehicle]


def look(driven: DrivenVehicle, as_of: datetime | None = None) -> Evaluation | None:
    return evaluate_vehicle(driven.services, driven.vehicle_id, driven.clock() if as_of is None else as_of)


def found(driven: DrivenVehicle, as_of: datetime | None = None) -> Evaluation:
    evaluation = look(driven, as_of)
    assert evaluation is not None
    return evaluation


def history(driven: DrivenVehicle) -> list[Evaluation]:
    with driven.services.read() as c:
        return evaluations.history(c, driven.vehicle_id)


def open_alerts(driven: DrivenVehicle) -> dict[str, Alert]:
    """By cause, those that have returned too."""
    with driven.services.read() as c:
        return {one.content.cause(): one for one in alerts.open_for(c, driven.vehicle_id)}


def standing(driven: DrivenVehicle) -> set[str]:
    """Causes that are said to hold."""
    return {cause for cause, one in open_alerts(driven).items() if one.standing != "returned"}


def all_alerts(driven: DrivenVehicle) -> list[Alert]:
    with driven.services.read() as c:
        return list(alerts.page(c, "all", driven.vehicle_id, 1000, None).items)


def proposed(driven: DrivenVehicle) -> list[Calibration]:
    with driven.services.read() as c:
        return calibrations.open_proposals(c, driven.vehicle_id)


def held(driven: DrivenVehicle) -> Calibration:
    with driven.services.read() as c:
        entry = in_force.in_force(c, driven.vehicle_id)
        assert entry is not None
        assert entry.calibration_id is not None
        return calibrations.by_id(c, entry.calibration_id)


def condition(driven: DrivenVehicle) -> str:
    """What the vehicle is told at boot; the kept sheet is what the record says."""
    assert upkeep.check(driven.services) == []
    with driven.services.read() as c:
        sheet = boots.sheet(c, driven.vehicle_id)
    return "nothing" if sheet is None else sheet.condition


def until_raised(driven: DrivenVehicle, most: int) -> int:
    """Drive ordinary runs, one pass after each, until an alert on a deviation stands; how many it took."""
    for number in range(1, most + 1):
        driven.work(1)
        look(driven)
        if any(cause.startswith("beyond") for cause in standing(driven)):
            return number
    raise AssertionError(f"nothing was raised within {most} runs")


def boot_on(driven: DrivenVehicle, number: int) -> None:
    statement = BootStatement(number, None, "fetched", None, None, None)
    report_boot(driven.services, Actor("vehicle", driven.vehicle_id), driven.vehicle_id, statement)


def enter(driven: DrivenVehicle, kind: str = "entered", u: float = 2e-4) -> Calibration:
    """Put the truth into force by hand, as known to a relative uncertainty."""
    values = Parameters(*(float(value) for value in driven.truth.parameters))
    left, right, width = (u * value for value in values.as_tuple())
    made = propose_entered(driven.services, TECHNICIAN, driven.vehicle_id, kind, values, (left, right, width), None)  # type: ignore[arg-type]  # the tests name kinds only
    return driven.put_in_force(made)


# What it judges


def test_a_vehicle_that_has_not_changed_is_within(calibrated: DrivenVehicle) -> None:
    driven_runs = calibrated.work(8)
    evaluation = found(calibrated)
    result = evaluation.result
    assert (result.finding, result.runs_used, result.against) == ("within", 8, held(calibrated).calibration_id)
    assert (result.first_run_at, result.last_run_at) == (driven_runs[0].started_at, driven_runs[-1].started_at)
    for item in result.quantities():
        assert item.observed
        assert item.deviation is not None
        assert item.u is not None
        assert abs(item.deviation) < 3.5 * item.u
    assert result.message.startswith("Within tolerance by 8 runs: tick factor ")
    assert evaluation.proposed_calibration_id is None
    assert (proposed(calibrated), open_alerts(calibrated), condition(calibrated)) == ([], {}, "good")
    with calibrated.services.read() as c:
        assert evaluations.latest(c, VEHICLE) == evaluation
        told = journal.page(c, JournalFilter(action="evaluated"), 10, None).items
    assert [entry.who for entry in told] == ["schedule"]


def test_one_run_cannot_tell_and_says_which_run_would(calibrated: DrivenVehicle) -> None:
    calibrated.work(1)
    result = found(calibrated).result
    assert result.finding == "cannot_tell"
    for item in result.quantities():
        assert (item.observed, item.deviation, item.u, item.probability_beyond) == (False, None, None, None)
    assert "These runs cannot tell" in result.message
    assert "drive a straight of 10 m" in result.message


def test_what_is_not_observed_is_not_published_beside_what_is(calibrated: DrivenVehicle) -> None:
    for _ in range(5):
        calibrated.clock.move(hours=12)
        calibrated.hand_in(straight(10.0))
    result = found(calibrated).result
    assert [item.observed for item in result.quantities()] == [True, True, False]
    assert (result.width.deviation, result.width.probability_beyond) == (None, None)
    assert result.finding == "within"
    assert "cannot tell effective width" in result.message


def test_the_runs_of_the_calibration_and_those_before_are_not_judged(calibrated: DrivenVehicle) -> None:
    assert look(calibrated) is None
    made_at = calibrated.clock() - timedelta(days=2)
    calibrated.hand_in(straight(10.0), started_at=made_at - timedelta(hours=1))
    assert look(calibrated) is None
    assert history(calibrated) == []
    # After the last run of the calibration, though before it came into force.
    calibrated.hand_in(straight(10.0), started_at=made_at + timedelta(hours=10))
    assert found(calibrated).result.runs_used == 1


def test_nothing_new_is_no_evaluation(calibrated: DrivenVehicle) -> None:
    calibrated.work(3)
    found(calibrated)
    calibrated.clock.move(days=1)
    assert look(calibrated) is None
    assert len(history(calibrated)) == 1
    calibrated.work(1)
    assert found(calibrated).result.runs_used == 4


def test_a_run_that_has_not_ended_yet_waits_for_the_next_pass(calibrated: DrivenVehicle) -> None:
    calibrated.work(3)
    calibrated.hand_in(straight(10.0), started_at=calibrated.clock())
    assert found(calibrated).result.runs_used == 3
    calibrated.clock.move(minutes=5)
    assert found(calibrated).result.runs_used == 4


def test_the_window_is_of_sixty_runs_unless_set_otherwise(make_calibrated: MakeCalibrated, tmp_path) -> None:
    assert Settings(home=tmp_path, database_url="sqlite:///somewhere.db", secret_key="s").window_runs == 60
    driven = make_calibrated(window_runs=5)
    handed_in = driven.work(8)
    result = found(driven).result
    assert (result.runs_used, result.first_run_at) == (5, handed_in[3].started_at)


def test_work_that_ends_the_window_cuts_it(calibrated: DrivenVehicle) -> None:
    calibrated.work(4)
    calibrated.clock.move(hours=1)
    record_maintenance(calibrated.services, TECHNICIAN, VEHICLE, calibrated.clock(), "pressure_set", "both")
    calibrated.work(3)
    record_maintenance(calibrated.services, TECHNICIAN, VEHICLE, calibrated.clock(), "towed")
    calibrated.work(1)
    assert found(calibrated).result.runs_used == 4
    assert condition(calibrated) == "questioned"


def test_a_run_set_aside_leaves_the_evaluation_and_a_restored_one_comes_back(calibrated: DrivenVehicle) -> None:
    handed_in = calibrated.work(5)
    assert found(calibrated).result.runs_used == 5
    set_aside(calibrated.services, APPROVER, handed_in[2].run_id, "slipped")
    assert found(calibrated).result.runs_used == 4
    restore(calibrated.services, APPROVER, handed_in[2].run_id, "it had not")
    assert found(calibrated).result.runs_used == 5
    assert look(calibrated) is None


def test_values_entered_by_hand_are_judged_on_the_runs_since_they_came_into_force(driven: DrivenVehicle) -> None:
    driven.work(3)
    enter(driven)
    assert look(driven) is None
    driven.work(4)
    assert found(driven).result.runs_used == 4


def test_a_provisional_calibration_is_nothing_to_hold_runs_against(driven: DrivenVehicle) -> None:
    enter(driven, "provisional")
    driven.work(3)
    assert look(driven) is None
    assert condition(driven) == "provisional"


def test_a_vehicle_with_nothing_in_force_is_not_judged(driven: DrivenVehicle) -> None:
    driven.work(3)
    assert look(driven) is None
    assert history(driven) == []


# What it finds


@pytest.mark.parametrize(
    ("left", "right", "width", "deviations"),
    [
        (0.003, 0.003, 0.0, (0.003, 0.0, 0.0)),
        (-0.0005, 0.0005, 0.0, (0.0, 0.001, 0.0)),
        (0.0, 0.0, -0.01, (0.0, 0.0, -0.01)),
    ],
)
def test_a_deviation_is_the_truth_over_what_is_in_force(
    calibrated: DrivenVehicle, left: float, right: float, width: float, deviations: tuple[float, float, float]
) -> None:
    calibrated.change(left, right, width)
    calibrated.work(8)
    for item, true in zip(found(calibrated).result.quantities(), deviations, strict=True):
        assert item.deviation is not None
        assert item.u is not None
        assert item.deviation == pytest.approx(true, abs=3.5 * item.u)
        assert item.u < 0.001


def test_the_uncertainty_is_of_the_fit_and_of_the_calibration(calibrated: DrivenVehicle) -> None:
    calibrated.work(6)
    result = found(calibrated).result
    assert result.fitted_u_relative is not None
    assert result.width.u is not None
    own = held(calibrated).result.covariance_relative[2][2]
    assert result.width.u == pytest.approx(math.sqrt(result.fitted_u_relative[2] ** 2 + own), rel=1e-9)


def test_a_calibration_known_loosely_is_not_called_beyond(driven: DrivenVehicle) -> None:
    enter(driven, u=0.01)
    driven.change(left=0.006, right=0.006)
    driven.work(6)
    evaluation = found(driven)
    # 0.6 % off with 0.7 % of its own uncertainty: the probability of being beyond 0.5 % is about a half.
    assert evaluation.result.finding in ("within", "uncertain")
    assert evaluation.result.tick_factor.probability_beyond == pytest.approx(0.6, abs=0.12)
    assert open_alerts(driven) == {}


def test_perhaps_beyond_is_uncertain_and_raises_nothing(calibrated: DrivenVehicle) -> None:
    # So close to the limit that a dozen runs cannot decide: 0.15 % in the side ratio.
    calibrated.change(left=-0.00076, right=0.00076)
    calibrated.work(5)
    evaluation = found(calibrated)
    probability = evaluation.result.side_ratio.probability_beyond
    assert probability is not None
    assert 0.05 < probability < 0.95
    assert evaluation.result.finding == ("uncertain" if probability >= 0.5 else "within")
    assert (proposed(calibrated), open_alerts(calibrated)) == ([], {})


def test_what_rests_on_one_run_is_not_raised_and_says_so(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    # Closed squares say nothing on the scale, so that the straight is alone in saying it.
    for legs in (square(3.0, 1), straight(10.0), square(3.0, -1)):
        calibrated.clock.move(hours=12)
        calibrated.hand_in(legs)
    result = found(calibrated).result
    assert result.finding == "uncertain"
    assert result.tick_factor.probability_beyond is not None
    assert result.tick_factor.probability_beyond > 0.95
    assert "rests on one run alone; a second one must agree" in result.message
    assert (open_alerts(calibrated), proposed(calibrated)) == ({}, [])
    calibrated.clock.move(hours=12)
    calibrated.hand_in(straight(10.0))
    assert found(calibrated).result.finding == "beyond"


def test_one_wrong_run_alone_never_raises(calibrated: DrivenVehicle) -> None:
    for before in range(4):
        calibrated.work(before)
        calibrated.clock.move(hours=1)
        wrong = calibrated.hand_in(half_loop(4.0, 1), Reading(wrong_m=0.4))
        assert found(calibrated).result.finding != "beyond"
        assert open_alerts(calibrated) == {}
        set_aside(calibrated.services, APPROVER, wrong.run_id, "read at the wrong mark")


def test_a_change_since_the_adoption_is_raised_within_a_few_runs(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    # The round holds one straight in five runs; a second run that tells the scale must agree with it.
    assert until_raised(calibrated, 5) >= 2
    alert = open_alerts(calibrated)["beyond_tolerance:tick_factor"]
    content = alert.content
    assert (alert.standing, alert.raised_at, content.quantity) == ("unacknowledged", calibrated.clock(), "tick_factor")
    assert content.size == pytest.approx(0.01, abs=3.5 * (content.u or 0.0))
    assert content.probability_beyond is not None
    assert content.probability_beyond >= 0.95
    assert content.message.startswith("Ore tub 9: tick factor is +")
    assert "overshoots" in content.consequence
    assert "(tolerance 0.5 %)" in content.message
    assert condition(calibrated) == "questioned"


def test_a_change_after_many_good_runs_is_raised_within_a_few_runs(calibrated: DrivenVehicle) -> None:
    calibrated.work(12)
    assert found(calibrated).result.finding == "within"
    calibrated.change(left=-0.008)
    assert until_raised(calibrated, 5) >= 2
    assert "beyond_tolerance:side_ratio" in standing(calibrated)


def test_a_change_beyond_the_maps_is_found_from_the_counts_and_folded_anew(calibrated: DrivenVehicle) -> None:
    # Both tick factors over the width: 2 % less 15 %, where the maps reach 8 %.
    calibrated.change(left=0.02, right=0.02, width=0.15)
    handed_in = calibrated.work(5)
    evaluation = found(calibrated)
    assert evaluation.result.finding == "beyond"
    for item, true in zip(evaluation.result.quantities(), (0.02, 0.0, 0.15), strict=True):
        assert item.deviation == pytest.approx(true, abs=3.5 * (item.u or 0.0))
    with calibrated.services.read() as c:
        maps = [closure_map.decode(blob) for blob in runs.maps(c, [run.run_id for run in handed_in]).values()]
    assert len(maps) == 5
    assert all(item.centre == pytest.approx(calibrated.truth.parameters, rel=0.005) for item in maps)
    calibrated.work(1)
    again = found(calibrated).result
    assert again.runs_used == 6
    assert again.width.deviation == pytest.approx(0.15, abs=3.5 * (again.width.u or 0.0))


def test_a_lost_whole_turn_is_found_again(calibrated: DrivenVehicle) -> None:
    calibrated.change(width=0.35)
    calibrated.work(7)
    calibrated.clock.move(hours=2)
    calibrated.hand_in(spin(3.0))
    result = found(calibrated).result
    assert result.finding == "beyond"
    assert result.width.deviation == pytest.approx(0.35, abs=0.01)


# What it proposes


def test_beyond_tolerance_proposes_a_calibration_that_can_be_adopted(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    calibrated.work(5)
    evaluation = found(calibrated)
    (proposal,) = proposed(calibrated)
    assert evaluation.proposed_calibration_id == proposal.calibration_id
    assert (proposal.result.kind, proposal.number, proposal.recorded_by) == ("evaluation", 2, "schedule")
    assert len(proposal.result.runs) == 5
    assert (
        f"decide on calibration {proposal.number}"
        in open_alerts(calibrated)["beyond_tolerance:tick_factor"].content.advice
    )
    relative = np.array(proposal.result.parameters.as_tuple()) / calibrated.truth.parameters - 1.0
    assert np.all(np.abs(relative) < 3.5 * np.sqrt(np.diag(np.array(proposal.result.covariance_relative))))
    # It proposes; a person adopts.
    assert held(calibrated).number == 1
    assert calibrated.put_in_force(proposal).standing == "in force"
    assert open_alerts(calibrated)["beyond_tolerance:tick_factor"].standing == "returned"
    assert condition(calibrated) == "good"
    calibrated.work(4)
    after = found(calibrated).result
    assert (after.finding, after.runs_used, after.against) == ("within", 4, proposal.calibration_id)


def test_there_is_one_open_proposal_kept_while_it_says_the_same(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=6)
    driven.change(left=0.01, right=0.01)
    driven.work(6)
    found(driven)
    (first,) = proposed(driven)
    # Thirty times a tolerance away: no longer the same.
    driven.change(left=0.02, right=0.02)
    driven.work(6)
    evaluation = found(driven)
    (second,) = proposed(driven)
    assert second.calibration_id == evaluation.proposed_calibration_id != first.calibration_id
    with driven.services.read() as c:
        assert calibrations.by_id(c, first.calibration_id).standing == "superseded"
    # The same runs again say the same.
    again = evaluate_vehicle(driven.services, VEHICLE, driven.clock(), force=True)
    assert again is not None
    assert again.proposed_calibration_id == second.calibration_id
    assert proposed(driven) == [second]


def test_a_proposal_is_superseded_once_the_vehicle_is_within_again(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=5)
    driven.change(left=0.01, right=0.01)
    driven.work(5)
    found(driven)
    (first,) = proposed(driven)
    driven.truth = TRUTH
    driven.work(5)
    assert found(driven).result.finding == "within"
    assert proposed(driven) == []
    with driven.services.read() as c:
        assert calibrations.by_id(c, first.calibration_id).standing == "superseded"


def test_without_a_wish_the_open_proposal_stays_only_while_its_alert_does(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    handed_in = calibrated.work(5)
    found(calibrated)
    (first,) = proposed(calibrated)

    def settle(keep: bool) -> Calibration | None:
        with calibrated.services.write() as c:
            return proposals.settle(c, calibrated.services, VEHICLE, held(calibrated).calibration_id, None, keep=keep)

    assert settle(keep=True) == first
    assert proposed(calibrated) == [first]
    set_aside(calibrated.services, APPROVER, handed_in[0].run_id, "slipped")
    # What rests on a run that does not count is kept by nothing.
    assert settle(keep=True) is None
    assert proposed(calibrated) == []


def test_what_the_runs_do_not_tell_is_copied_into_the_proposal(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    for _ in range(5):
        calibrated.clock.move(hours=12)
        calibrated.hand_in(straight(10.0))
    assert found(calibrated).result.finding == "beyond"
    (proposal,) = proposed(calibrated)
    own = held(calibrated).result
    assert proposal.result.observed.as_tuple() == (True, True, False)
    assert proposal.result.parameters.width_m == own.parameters.width_m
    assert proposal.result.covariance_relative[2][2] == own.covariance_relative[2][2]


def test_nothing_is_proposed_that_would_carry_a_width_from_before_the_work(calibrated: DrivenVehicle) -> None:
    calibrated.clock.move(hours=1)
    record_maintenance(calibrated.services, TECHNICIAN, VEHICLE, calibrated.clock(), "part_fitted", "both")
    calibrated.change(left=0.01, right=0.01, width=0.05)
    for _ in range(5):
        calibrated.clock.move(hours=12)
        calibrated.hand_in(straight(10.0))
    evaluation = found(calibrated)
    assert (evaluation.result.finding, evaluation.proposed_calibration_id) == ("beyond", None)
    assert proposed(calibrated) == []
    assert "drive calibration runs" in open_alerts(calibrated)["beyond_tolerance:tick_factor"].content.advice


def test_a_baseline_waiting_for_adoption_is_left_alone(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    session = calibrated.session()
    waiting = calibrated.baseline(tuple(run.run_id for run in session))
    found(calibrated)
    assert [one.result.kind for one in proposed(calibrated)] == ["baseline", "evaluation"]
    calibrated.put_in_force(waiting)
    look(calibrated)
    # The evaluation's own proposal was made against what is no longer in force.
    assert proposed(calibrated) == []


# Alerts


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


def replace_sides(change: float) -> Truth:
    return replace(
        TRUTH,
        left_m_per_tick=TRUTH.left_m_per_tick * (1 + change),
        right_m_per_tick=TRUTH.right_m_per_tick * (1 + change),
    )


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


# The world moves while the runs are fitted


def test_nothing_is_recorded_against_a_calibration_that_is_no_longer_in_force(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    calibrated.work(5)
    services = meanwhile(calibrated.services, lambda: enter(calibrated))
    assert evaluate_vehicle(services, VEHICLE, calibrated.clock()) is None
    assert (history(calibrated), open_alerts(calibrated), proposed(calibrated)) == ([], {}, [])


def test_of_two_passes_at_once_one_writes(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    calibrated.work(5)
    services = meanwhile(calibrated.services, lambda: look(calibrated))
    assert evaluate_vehicle(services, VEHICLE, calibrated.clock()) is None
    assert len(history(calibrated)) == 1
    assert len(proposed(calibrated)) == 1
    assert [len(one.history) for one in all_alerts(calibrated)] == [1] * len(all_alerts(calibrated))


def test_a_boot_that_comes_in_meanwhile_is_not_missed(calibrated: DrivenVehicle) -> None:
    boot_on(calibrated, 1)
    adopted = enter(calibrated)
    calibrated.clock.move(days=4)
    services = meanwhile(calibrated.services, lambda: boot_on(calibrated, adopted.number))
    evaluate_vehicle(services, VEHICLE, calibrated.clock())
    assert open_alerts(calibrated) == {}


def test_a_pass_that_has_lost_its_lease_writes_nothing(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    calibrated.work(5)
    now = calibrated.clock()
    with calibrated.services.write() as c:
        fence = leases.acquire(c, "fleet pass", "one", now, 60.0)
    assert fence is not None
    ours = Holder("fleet pass", "one", fence)

    def another_takes_over() -> None:
        calibrated.clock.move(minutes=2)
        with calibrated.services.write() as c:
            assert leases.acquire(c, "fleet pass", "two", calibrated.clock(), 60.0) is not None

    with pytest.raises(LeaseLost):
        evaluate_vehicle(meanwhile(calibrated.services, another_takes_over), VEHICLE, now, holder=ours)
    assert (history(calibrated), open_alerts(calibrated), proposed(calibrated)) == ([], {}, [])
    with calibrated.services.write() as c:
        again = leases.acquire(c, "fleet pass", "one", calibrated.clock.move(minutes=2), 60.0)
    assert again is not None
    holder = Holder("fleet pass", "one", again)
    assert evaluate_vehicle(calibrated.services, VEHICLE, calibrated.clock(), holder=holder) is not None


# Looking at the past


def test_the_past_is_judged_with_everything_known_now(calibrated: DrivenVehicle) -> None:
    handed_in = calibrated.work(6)
    late = calibrated.hand_in(straight(10.0), started_at=handed_in[1].ended_at + timedelta(hours=1))
    as_of = handed_in[2].ended_at
    evaluation = found(calibrated, as_of)
    assert (evaluation.as_of, evaluation.recorded_at) == (as_of, calibrated.clock())
    assert evaluation.result.runs_used == 4
    assert evaluation.result.last_run_at == handed_in[2].started_at
    set_aside(calibrated.services, APPROVER, late.run_id, "slipped")
    assert found(calibrated, as_of).result.runs_used == 3
    assert found(calibrated, handed_in[0].ended_at).result.runs_used == 1


def test_an_alert_of_the_past_is_raised_at_its_time_and_recorded_now(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.01, right=0.01)
    as_of = calibrated.work(5)[-1].ended_at
    calibrated.clock.move(days=2)
    found(calibrated, as_of)
    alert = open_alerts(calibrated)["beyond_tolerance:tick_factor"]
    assert (alert.raised_at, alert.recorded_at) == (as_of, calibrated.clock())


def test_a_late_look_at_the_past_is_history_and_leaves_the_present_alone(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=5)
    driven.change(left=0.01, right=0.01)
    bad = driven.work(5)
    driven.truth = TRUTH
    driven.work(5)
    assert found(driven).result.finding == "within"
    evaluation = found(driven, bad[-1].ended_at)
    assert (evaluation.result.finding, evaluation.proposed_calibration_id) == ("beyond", None)
    assert (open_alerts(driven), proposed(driven), condition(driven)) == ({}, [], "good")
    with driven.services.read() as c:
        newest = evaluations.latest(c, VEHICLE)
    assert newest is not None
    assert newest.result.finding == "within"


def test_a_late_look_at_a_better_past_closes_nothing(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated(window_runs=5)
    good = driven.work(5)
    driven.change(left=0.01, right=0.01)
    driven.work(5)
    found(driven)
    before = (open_alerts(driven), proposed(driven))
    assert found(driven, good[-1].ended_at).result.finding == "within"
    assert (open_alerts(driven), proposed(driven)) == before
    assert "beyond_tolerance:tick_factor" in standing(driven)


def test_a_late_look_at_a_silent_past_raises_nothing(calibrated: DrivenVehicle) -> None:
    calibrated.work(2)
    silent = calibrated.clock() + timedelta(days=35)
    calibrated.clock.move(days=40)
    calibrated.work(2)
    found(calibrated)
    assert look(calibrated, silent) is not None
    assert open_alerts(calibrated) == {}


def test_a_past_calibration_is_not_proposed_against(make_calibrated: MakeCalibrated) -> None:
    driven = make_calibrated()
    driven.change(left=0.01, right=0.01)
    as_of = driven.work(5)[-1].ended_at
    driven.clock.move(hours=1)
    enter(driven)
    evaluation = found(driven, as_of)
    assert (evaluation.result.finding, evaluation.proposed_calibration_id) == ("beyond", None)
    assert proposed(driven) == []
    # It held then; the next pass sees that another calibration is in force.
    look(driven)
    assert (standing(driven), condition(driven)) == (set(), "good")


# Honest statistics


def quiet_fleet(services: Services, clock: StandingClock, size: int) -> Sequence[DrivenVehicle]:
    """Vehicles that differ, each entered with an error that its stated uncertainty is true of."""
    rng = np.random.default_rng(2026)
    fleet = []
    for number in range(size):
        vehicle = registered(services, clock, f"tub-{100 + number}", seed=1000 + number)
        known = Parameters(*(float(value) for value in vehicle.truth.parameters))
        u = 3e-4
        left, right, width = (u * value for value in known.as_tuple())
        made = propose_entered(services, TECHNICIAN, vehicle.vehicle_id, "entered", known, (left, right, width), None)
        vehicle.put_in_force(made)
        error = u * rng.standard_normal(3)
        vehicle.change(*(float(value) for value in error))
        fleet.append(vehicle)
    return fleet


@pytest.mark.slow
def test_of_forty_quiet_vehicles_none_is_called_beyond_in_twenty_runs(services: Services, clock: StandingClock) -> None:
    fleet = quiet_fleet(services, clock, 40)
    begin = clock()
    scores = []
    for vehicle in fleet:
        clock.time = begin
        for _ in range(4):
            vehicle.work(5)
            result = found(vehicle).result
            assert result.finding == "within", (vehicle.vehicle_id, result.message)
        assert open_alerts(vehicle) == {}
        scores += [item.deviation / item.u for item in result.quantities() if item.deviation and item.u]
    assert len(scores) == 120
    # Standard scores of a stated uncertainty: their spread is one, to within three times 1/sqrt(2 * 120).
    assert np.std(scores) == pytest.approx(1.0, abs=0.2)
    # Two quantities of a vehicle are correlated, so that the mean is known to about 1/sqrt(80).
    assert abs(np.mean(scores)) < 0.35


def test_an_unknown_vehicle_is_not_looked_at(services: Services, clock: StandingClock) -> None:
    with pytest.raises(NotFound, match="tub-99"):
        evaluate_vehicle(services, "tub-99", clock())


def test_a_new_version_of_the_vehicle_is_something_new(calibrated: DrivenVehicle) -> None:
    calibrated.work(3)
    found(calibrated)
    wider = replace(STATEMENT, tolerance=replace(STATEMENT.tolerance, tick_factor=0.01))
    put_vehicle(calibrated.services, APPROVER, VEHICLE, wider, STATEMENT.etag())
    assert found(calibrated).result.runs_used == 3
