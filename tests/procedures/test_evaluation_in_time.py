"""A look at a vehicle while the world moves, and at its past."""

from __future__ import annotations

from datetime import timedelta

import pytest

from registry.procedures.evaluation import Holder, LeaseLost, evaluate_vehicle
from registry.procedures.intake import set_aside
from registry.storage import evaluations, leases
from tests.numerics.drives import straight
from tests.procedures.drives_on_record import (
    APPROVER,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
    meanwhile,
)
from tests.procedures.looks import (
    MakeCalibrated,
    all_alerts,
    boot_on,
    condition,
    enter,
    found,
    history,
    look,
    open_alerts,
    proposed,
    standing,
)

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
