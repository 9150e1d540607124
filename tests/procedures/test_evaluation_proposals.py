"""What an evaluation proposes, and when the proposal goes."""

from __future__ import annotations

import numpy as np

from registry.domain.calibration import Calibration
from registry.procedures import proposals
from registry.procedures.evaluation import evaluate_vehicle
from registry.procedures.intake import set_aside
from registry.procedures.maintenance import record_maintenance
from registry.storage import calibrations
from tests.numerics.drives import straight
from tests.procedures.drives_on_record import (
    APPROVER,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
)
from tests.procedures.looks import (
    MakeCalibrated,
    condition,
    found,
    held,
    look,
    open_alerts,
    proposed,
)


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
