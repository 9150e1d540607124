"""One scheduled look at a vehicle: what it judges and what it finds."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from registry.domain.vehicle import Parameters
from registry.errors import NotFound
from registry.numerics import closure_map
from registry.procedures.baseline import propose_entered
from registry.procedures.evaluation import evaluate_vehicle
from registry.procedures.intake import restore, set_aside
from registry.procedures.maintenance import record_maintenance
from registry.procedures.registration import put_vehicle
from registry.services import Services
from registry.settings import Settings
from registry.storage import evaluations, journal, runs
from registry.storage.journal import JournalFilter
from tests.conftest import StandingClock
from tests.numerics.drives import half_loop, spin, square, straight
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    VEHICLE,
    DrivenVehicle,
    Reading,
    registered,
)
from tests.procedures.looks import (
    MakeCalibrated,
    condition,
    enter,
    found,
    held,
    history,
    look,
    open_alerts,
    proposed,
    standing,
    until_raised,
)

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
    assert result.finding == "cannot_tell"
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


def test_an_unknown_vehicle_is_not_looked_at(services: Services, clock: StandingClock) -> None:
    with pytest.raises(NotFound, match="tub-99"):
        evaluate_vehicle(services, "tub-99", clock())


def test_a_new_version_of_the_vehicle_is_something_new(calibrated: DrivenVehicle) -> None:
    calibrated.work(3)
    found(calibrated)
    wider = replace(STATEMENT, tolerance=replace(STATEMENT.tolerance, tick_factor=0.01))
    put_vehicle(calibrated.services, APPROVER, VEHICLE, wider, STATEMENT.etag())
    assert found(calibrated).result.runs_used == 3


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
