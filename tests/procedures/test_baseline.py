"""Proposing a calibration: fitted from runs, or entered by hand."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from registry.domain.calibration import Calibration
from registry.domain.person import Actor
from registry.domain.run import Run
from registry.domain.vehicle import Parameters
from registry.errors import Conflict, Invalid, NotAllowed, NotFound, NotObserved
from registry.procedures.adoption import withdraw
from registry.procedures.baseline import propose_baseline, propose_entered
from registry.procedures.intake import set_aside, take_run
from registry.procedures.maintenance import record_maintenance
from registry.procedures.registration import put_vehicle
from registry.storage import calibrations, journal, runs
from registry.storage.journal import JournalFilter
from tests.numerics.drives import half_loop, spin, square, straight, traverse
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    VEHICLE,
    DrivenVehicle,
    Reading,
    meanwhile,
)

U_M = (7e-7, 7e-7, 0.01)
#: Known from elsewhere, and off the truth by less than its uncertainty.
KNOWN = Parameters(3.5125e-4, 3.4965e-4, 0.8685)
KNOWN_U_M = (3.5e-7, 3.5e-7, 0.002)


def errors_of(made: Calibration, driven: DrivenVehicle) -> np.ndarray:
    """How far a calibration is off the truth, in units of its own standard uncertainties."""
    relative = np.array(made.result.parameters.as_tuple()) / driven.truth.parameters - 1.0
    return relative / np.sqrt(np.diag(np.array(made.result.covariance_relative)))


def entered(driven: DrivenVehicle, parameters: Parameters = KNOWN, kind: str = "entered") -> Calibration:
    made = propose_entered(driven.services, TECHNICIAN, VEHICLE, kind, parameters, KNOWN_U_M, "by hand")  # type: ignore[arg-type]  # some tests name a kind that is none
    return driven.put_in_force(made)


def number_of_calibrations(driven: DrivenVehicle) -> int:
    with driven.services.read() as c:
        return len(calibrations.all_for(c, VEHICLE))


def pointers_of(refusal: Invalid | NotObserved) -> list[str]:
    return [error.pointer for error in refusal.errors]


def usable_runs(driven: DrivenVehicle) -> list[Run]:
    with driven.services.read() as c:
        return runs.usable(c, VEHICLE)


# From runs


def test_a_session_recovers_the_truth_within_its_uncertainty(driven: DrivenVehicle) -> None:
    driven_runs = driven.session()
    made = driven.baseline()
    assert (made.number, made.result.kind, made.standing) == (1, "baseline", "proposed")
    assert made.result.observed.as_tuple() == (True, True, True)
    # Three standard uncertainties; the ruler was 40 % off.
    assert np.all(np.abs(errors_of(made, driven)) < 3.0)
    u = np.sqrt(np.diag(np.array(made.result.covariance_relative)))
    # What must be reached: 0.03 % on a tick factor and 0.06 % on the width, for (0.7 mm)^2 on a metre.
    assert u[0] < 3.5e-4
    assert u[1] < 3.5e-4
    assert u[2] < 6e-4
    assert {one.run_id for one in made.result.runs} == {run.run_id for run in driven_runs}
    assert made.result.birge_ratio is not None
    assert 0.5 < made.result.birge_ratio < 2.0
    assert made.result.coverage_factor > 1.96
    assert made.recorded_by == "Tove"


def test_what_is_proposed_is_read_back_in_plain_numbers(after_session: DrivenVehicle) -> None:
    made = after_session.baseline()
    with after_session.services.read() as c:
        assert calibrations.by_id(c, made.calibration_id) == made
        told = journal.page(c, JournalFilter(action="calibration proposed"), 10, None).items
    assert len(told) == 1
    numbers = [*made.result.parameters.as_tuple(), *(value for row in made.result.covariance_relative for value in row)]
    assert {type(number) for number in numbers} == {float}


def test_each_run_says_what_it_contributed(after_session: DrivenVehicle) -> None:
    made = after_session.baseline()
    for one in made.result.runs:
        assert 0.0 < one.weight <= 1.0
        assert all(abs(value) < 0.01 for value in one.influence)
        assert one.after.distance_m is None
    # By the ruler's values the spins end whole turns away; by the fit within a degree or so.
    before = max(abs(one.before.heading_rad or 0.0) for one in made.result.runs)
    after = max(abs(one.after.heading_rad or 0.0) for one in made.result.runs)
    assert before > 2.0
    assert after < math.radians(2.0)


def test_one_run_that_is_a_metre_wrong_does_not_move_it(after_session: DrivenVehicle) -> None:
    driven = after_session
    sound = driven.baseline()
    wrong = driven.hand_in(traverse(4.0, 0.8, 5.0), Reading(wrong_m=1.0))
    made = driven.baseline()
    shift = np.array(made.result.parameters.as_tuple()) / np.array(sound.result.parameters.as_tuple()) - 1.0
    u = np.sqrt(np.diag(np.array(sound.result.covariance_relative)))
    assert np.all(np.abs(shift) < u)
    weights = {one.run_id: one.weight for one in made.result.runs}
    assert weights[wrong.run_id] < 0.01
    assert sorted(weights.values())[1] > 0.2


def test_all_usable_runs_are_used_unless_some_are_named(after_session: DrivenVehicle) -> None:
    driven, taken = after_session, usable_runs(after_session)
    set_aside(driven.services, APPROVER, taken[0].run_id, "slipped")
    fresh = driven.hand_in(straight(10.0), started_at=driven.clock() + timedelta(minutes=4))
    everything, some = driven.baseline(), driven.baseline(tuple(run.run_id for run in taken[1:]))
    assert {one.run_id for one in everything.result.runs} == {run.run_id for run in [*taken[1:], fresh]}
    assert [one.run_id for one in some.result.runs] == [run.run_id for run in taken[1:]]
    assert (everything.number, some.number) == (1, 2)


def test_runs_that_cannot_be_used_are_named_one_by_one(after_session: DrivenVehicle) -> None:
    driven, taken = after_session, usable_runs(after_session)
    set_aside(driven.services, APPROVER, taken[1].run_id, "slipped")
    other = other_vehicles_run(driven)
    asked = (taken[0].run_id, taken[1].run_id, taken[0].run_id, other.run_id)
    with pytest.raises(Invalid) as refused:
        driven.baseline(asked)
    assert pointers_of(refused.value) == ["/run_ids/1", "/run_ids/2", "/run_ids/3"]
    for error, words in zip(refused.value.errors, ("is set aside", "named twice", "of vehicle tub-10"), strict=True):
        assert words in error.detail
    with pytest.raises(NotFound, match="no run 'nowhere'"):
        driven.baseline((taken[0].run_id, "nowhere"))
    assert number_of_calibrations(driven) == 0


def other_vehicles_run(driven: DrivenVehicle) -> Run:
    put_vehicle(driven.services, APPROVER, "tub-10", STATEMENT)
    run, _ = take_run(driven.services, TECHNICIAN, "tub-10", driven.state(straight(5.0)))
    return run


def test_an_unknown_vehicle_has_no_baseline(driven: DrivenVehicle) -> None:
    with pytest.raises(NotFound, match="tub-99"):
        propose_baseline(driven.services, TECHNICIAN, "tub-99", None, None)


@pytest.mark.parametrize("actor", [Actor("person", "Rea", "reader"), Actor("vehicle", VEHICLE)], ids=str)
def test_who_may_not_propose(driven: DrivenVehicle, actor: Actor) -> None:
    driven.session()
    with pytest.raises(NotAllowed):
        propose_baseline(driven.services, actor, VEHICLE, None, None)
    with pytest.raises(NotAllowed):
        propose_entered(driven.services, actor, VEHICLE, "entered", KNOWN, U_M, None)


# What the runs do not tell


def test_without_runs_every_quantity_is_open(driven: DrivenVehicle) -> None:
    for run_ids in (None, ()):
        with pytest.raises(NotObserved) as refused:
            driven.baseline(run_ids)
        assert pointers_of(refused.value) == ["/tick_factor", "/side_ratio", "/width"]
        assert all("no usable run" in error.detail for error in refused.value.errors)


def test_closed_loops_leave_scale_and_width_open_and_say_which_run_settles_them(driven: DrivenVehicle) -> None:
    for sense in (1, -1) * 4:
        driven.clock.move(minutes=20)
        driven.hand_in(square(3.0, sense))
    with pytest.raises(NotObserved) as refused:
        driven.baseline()
    told = {error.pointer: error.detail for error in refused.value.errors}
    assert list(told) == ["/tick_factor", "/width"]
    assert "straight of 10 m" in told["/tick_factor"]
    assert "turn on the spot" in told["/width"]
    assert number_of_calibrations(driven) == 0


def test_straights_leave_the_width_open(driven: DrivenVehicle) -> None:
    for _ in range(5):
        driven.clock.move(minutes=20)
        driven.hand_in(straight(10.0))
    with pytest.raises(NotObserved) as refused:
        driven.baseline()
    assert pointers_of(refused.value) == ["/width"]


def test_one_run_alone_proves_nothing(driven: DrivenVehicle) -> None:
    driven.hand_in(half_loop(4.0, 1))
    with pytest.raises(NotObserved):
        driven.baseline()


def with_straights(driven: DrivenVehicle) -> None:
    for _ in range(5):
        driven.clock.move(minutes=20)
        driven.hand_in(straight(10.0))


def test_the_calibration_in_force_supplies_what_is_open_to_the_last_digit(driven: DrivenVehicle) -> None:
    held = entered(driven)
    with_straights(driven)
    made = driven.baseline()
    assert made.result.observed.as_tuple() == (True, True, False)
    assert made.result.parameters.width_m == held.result.parameters.width_m
    assert made.result.covariance_relative[2][2] == held.result.covariance_relative[2][2]
    assert np.all(np.abs(errors_of(made, driven)) < 3.0)
    # The sides are the runs' own, and surer than what was entered.
    assert made.result.parameters.left_m_per_tick != held.result.parameters.left_m_per_tick
    assert made.result.covariance_relative[0][0] < 0.5 * held.result.covariance_relative[0][0]
    assert np.all(np.linalg.eigvalsh(np.array(made.result.covariance_relative)) > 0.0)
    assert made.based_on == held.calibration_id


def test_both_sides_are_copied_where_only_the_width_is_told(driven: DrivenVehicle) -> None:
    held = entered(driven)
    for turns in (3.0, -3.0, 4.0, -4.0):
        driven.clock.move(minutes=20)
        driven.hand_in(spin(turns), Reading(("heading",)))
    with pytest.raises(NotObserved):
        # The width is told only relative to the tick factor, so on their own the spins tell nothing.
        propose_from_nothing(driven)
    made = driven.baseline()
    assert made.result.observed.as_tuple() == (False, False, False)
    assert made.result.parameters == held.result.parameters
    assert made.result.covariance_relative == held.result.covariance_relative


def propose_from_nothing(driven: DrivenVehicle) -> Calibration:
    """The same question to a vehicle that has the same runs and nothing in force."""
    put_vehicle(driven.services, APPROVER, "tub-10", STATEMENT)
    with driven.services.read() as c:
        known = [(run, runs.counts(c, run.run_id)) for run in runs.usable(c, VEHICLE)]
    for run, counts in known:
        statement = replace(
            driven.state(spin(1.0)),
            started_at=run.started_at,
            time_s=counts.time_s,
            left_counts=counts.left,
            right_counts=counts.right,
            closure=run.closure,
        )
        take_run(driven.services, TECHNICIAN, "tub-10", statement)
    return propose_baseline(driven.services, TECHNICIAN, "tub-10", None, None)


def test_a_supplied_scale_is_carried_with_its_uncertainty(driven: DrivenVehicle) -> None:
    held = entered(driven)
    for sense in (1, -1) * 4:
        driven.clock.move(minutes=20)
        driven.hand_in(square(3.0, sense))
    made = driven.baseline()
    assert made.result.observed.as_tuple() == (False, True, False)
    was, now = held.result.parameters, made.result.parameters
    assert now.width_m == was.width_m
    # The mean of two sides that are both fitted: equal up to the last binary digits.
    assert now.tick_factor_m_per_tick == pytest.approx(was.tick_factor_m_per_tick, rel=1e-14)
    u_scale = [
        math.sqrt(cov[0][0] + 2 * cov[0][1] + cov[1][1]) / 2
        for cov in (np.array(held.result.covariance_relative), np.array(made.result.covariance_relative))
    ]
    # The relative mean of unlike sides, to first order in their difference.
    assert u_scale[1] == pytest.approx(u_scale[0], rel=1e-2)


def test_a_provisional_calibration_supplies_nothing(driven: DrivenVehicle) -> None:
    entered(driven, kind="provisional")
    with_straights(driven)
    with pytest.raises(NotObserved) as refused:
        driven.baseline()
    assert pointers_of(refused.value) == ["/width"]


def test_a_reinstated_provisional_calibration_supplies_nothing(driven: DrivenVehicle) -> None:
    entered(driven, kind="provisional")
    driven.clock.move(hours=1)
    better = entered(driven)
    driven.clock.move(hours=1)
    withdraw(driven.services, APPROVER, better.calibration_id, "digits exchanged", "reinstate", 1)
    with_straights(driven)
    with pytest.raises(NotObserved):
        driven.baseline()


def test_a_calibration_from_before_work_supplies_nothing_after_it(driven: DrivenVehicle) -> None:
    entered(driven)
    driven.clock.move(hours=1)
    record_maintenance(driven.services, TECHNICIAN, VEHICLE, driven.clock(), "track_tensioned", "left")
    with_straights(driven)
    with pytest.raises(NotObserved) as refused:
        driven.baseline()
    assert pointers_of(refused.value) == ["/width"]


def test_values_from_before_work_supply_nothing_by_being_adopted_after_it(after_session: DrivenVehicle) -> None:
    driven = after_session
    proposed = driven.baseline()
    driven.clock.move(hours=1)
    record_maintenance(driven.services, TECHNICIAN, VEHICLE, driven.clock(), "track_tensioned", "left")
    driven.clock.move(hours=1)
    driven.put_in_force(proposed)
    with_straights(driven)
    with pytest.raises(NotObserved):
        driven.baseline()


# Work ends the window


def test_runs_before_the_work_are_left_out_when_none_is_named(after_session: DrivenVehicle) -> None:
    driven = after_session
    driven.clock.move(hours=1)
    record_maintenance(driven.services, TECHNICIAN, VEHICLE, driven.clock(), "part_fitted", "both")
    with pytest.raises(NotObserved):
        driven.baseline()
    driven.change(left=-0.02, right=-0.02)
    after = driven.session()
    made = driven.baseline()
    assert {one.run_id for one in made.result.runs} == {run.run_id for run in after}
    assert np.all(np.abs(errors_of(made, driven)) < 3.0)


def test_runs_before_the_work_are_refused_when_named(driven: DrivenVehicle) -> None:
    old = driven.session()
    driven.clock.move(hours=1)
    record_maintenance(driven.services, TECHNICIAN, VEHICLE, driven.clock(), "part_fitted", "both")
    new = driven.session()
    with pytest.raises(Invalid) as refused:
        driven.baseline((*(run.run_id for run in new), old[2].run_id))
    assert pointers_of(refused.value) == ["/run_ids/12"]
    assert "before the work" in refused.value.errors[0].detail


def test_work_that_moves_nothing_does_not_end_the_window(after_session: DrivenVehicle) -> None:
    record_maintenance(after_session.services, TECHNICIAN, VEHICLE, after_session.clock(), "towed")
    assert len(after_session.baseline().result.runs) == 12


# The world moves while the fit is made


def test_another_calibration_in_force_meanwhile_is_a_conflict(after_session: DrivenVehicle) -> None:
    services = meanwhile(after_session.services, lambda: entered(after_session))
    with pytest.raises(Conflict, match="another calibration came into force meanwhile"):
        propose_baseline(services, TECHNICIAN, VEHICLE, None, None)
    assert number_of_calibrations(after_session) == 1


def test_a_run_set_aside_meanwhile_is_a_conflict(after_session: DrivenVehicle) -> None:
    run_id = usable_runs(after_session)[3].run_id
    services = meanwhile(after_session.services, lambda: set_aside(after_session.services, APPROVER, run_id, "slipped"))
    with pytest.raises(Conflict, match="set aside meanwhile"):
        propose_baseline(services, TECHNICIAN, VEHICLE, None, None)
    assert number_of_calibrations(after_session) == 0


def test_work_recorded_meanwhile_is_a_conflict(after_session: DrivenVehicle) -> None:
    driven = after_session
    services = meanwhile(
        driven.services,
        lambda: record_maintenance(driven.services, TECHNICIAN, VEHICLE, driven.clock(), "repaired", "left"),
    )
    with pytest.raises(Conflict, match="recorded meanwhile"):
        propose_baseline(services, TECHNICIAN, VEHICLE, None, None)
    assert number_of_calibrations(driven) == 0


# Entered and provisional


@pytest.mark.parametrize("kind", ["entered", "provisional"])
def test_values_from_elsewhere_are_kept_as_stated(driven: DrivenVehicle, kind: str) -> None:
    made = propose_entered(driven.services, TECHNICIAN, VEHICLE, kind, KNOWN, U_M, "from the sheet")  # type: ignore[arg-type]  # both are kinds
    assert (made.result.kind, made.standing, made.result.parameters) == (kind, "proposed", KNOWN)
    assert made.result.observed.as_tuple() == (False, False, False)
    u_m = np.sqrt(np.diag(np.array(made.result.covariance_relative))) * np.array(KNOWN.as_tuple())
    assert u_m == pytest.approx(np.array(U_M), rel=1e-12)
    assert np.count_nonzero(made.result.covariance_relative) == 3
    with driven.services.read() as c:
        assert calibrations.by_id(c, made.calibration_id) == made


@pytest.mark.parametrize("wrong", [0.0, -1e-4, math.nan, math.inf, 1e300])
def test_a_value_that_no_vehicle_has_is_refused_by_name(driven: DrivenVehicle, wrong: float) -> None:
    for index, name in enumerate(("left_m_per_tick", "right_m_per_tick", "width_m")):
        pointer = ("/left_mm_per_tick", "/right_mm_per_tick", "/width_mm")[index]
        with pytest.raises(Invalid) as refused:
            propose_entered(driven.services, TECHNICIAN, VEHICLE, "entered", replace(KNOWN, **{name: wrong}), U_M, None)
        assert pointer in pointers_of(refused.value)
        u_m = tuple(wrong if i == index else u for i, u in enumerate(U_M))
        with pytest.raises(Invalid) as refused:
            propose_entered(driven.services, TECHNICIAN, VEHICLE, "entered", KNOWN, (u_m[0], u_m[1], u_m[2]), None)
        assert pointers_of(refused.value) == [f"/u{pointer}"]
    assert number_of_calibrations(driven) == 0


def test_an_uncertainty_larger_than_its_value_is_a_wrong_unit(driven: DrivenVehicle) -> None:
    with pytest.raises(Invalid) as refused:
        propose_entered(driven.services, TECHNICIAN, VEHICLE, "entered", KNOWN, (7e-4, 7e-7, 0.01), None)
    assert [(e.pointer, "check the unit" in e.detail) for e in refused.value.errors] == [("/u/left_mm_per_tick", True)]


@pytest.mark.parametrize("kind", ["baseline", "evaluation", "reinstated", "guess"])
def test_only_entered_and_provisional_values_can_be_entered(driven: DrivenVehicle, kind: str) -> None:
    with pytest.raises(Invalid) as refused:
        propose_entered(driven.services, TECHNICIAN, VEHICLE, kind, KNOWN, U_M, None)  # type: ignore[arg-type]  # that is the point
    assert pointers_of(refused.value) == ["/kind"]


def test_values_for_an_unknown_vehicle_are_not_found(driven: DrivenVehicle) -> None:
    with pytest.raises(NotFound, match="tub-99"):
        propose_entered(driven.services, TECHNICIAN, "tub-99", "entered", KNOWN, U_M, None)


# After the first


def test_the_next_baseline_starts_from_the_one_in_force_and_finds_a_change(calibrated: DrivenVehicle) -> None:
    calibrated.change(left=0.008, width=0.05)
    changed = calibrated.session()
    made = calibrated.baseline(tuple(run.run_id for run in changed))
    assert np.all(np.abs(errors_of(made, calibrated)) < 3.0)
    assert (made.number, made.based_on is not None) == (2, True)
