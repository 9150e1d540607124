"""Taking runs in: what is kept, who may hand it in, and how the run closes."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from registry.domain.person import Actor
from registry.domain.run import Conditions
from registry.domain.vehicle import Parameters
from registry.errors import Conflict, NotAllowed, NotFound
from registry.procedures import intake
from registry.procedures.baseline import propose_entered
from registry.procedures.intake import check_run, take_run
from registry.procedures.registration import put_vehicle
from registry.storage import counts_blob, runs
from tests.numerics.drives import half_loop, spin, straight
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
    Reading,
    sealed,
    statement_of,
)
from tests.procedures.hand_ins import (
    everything_of,
    with_bits,
)

# Taken as it is


def test_a_run_is_read_back_exactly_as_it_was_answered(driven: DrivenVehicle) -> None:
    statement = driven.state(half_loop(4.0, 1))
    run, created = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    assert created
    with driven.services.read() as c:
        assert runs.by_id(c, run.run_id) == run
        counts = runs.counts(c, run.run_id)
        assert runs.counts_bytes(c, run.run_id)
    assert np.array_equal(counts.time_s, statement.time_s)
    assert np.array_equal(counts.left, statement.left_counts)
    assert np.array_equal(counts.right, statement.right_counts)
    assert (run.use, run.reasons) == ("usable", ())
    assert run.samples == statement.time_s.size
    assert run.duration_s == pytest.approx(float(statement.time_s[-1]))
    assert run.ended_at == statement.started_at + timedelta(seconds=run.duration_s)
    assert run.recorded_by == "Tove"
    assert run.counts_digest == counts_blob.counts_digest(
        counts_blob.encode(statement.time_s, statement.left_counts, statement.right_counts)
    )


def test_way_and_turn_are_those_of_the_wheels(driven: DrivenVehicle) -> None:
    straight_run, spun = driven.hand_in(straight(10.0)), driven.hand_in(spin(3.0))
    # By the ruler's values: within the half percent that the true tick factors differ from them.
    assert straight_run.distance_m == pytest.approx(10.0, rel=0.005)
    assert abs(straight_run.turned_rad) < 0.1
    # The ruler's width is 40 % too small, so the turn is 40 % too large until a calibration says better.
    assert spun.turned_rad == pytest.approx(6 * math.pi * TRUTH.width_m / STATEMENT.nominal.width_m, rel=0.01)


def test_the_same_content_again_answers_the_run_on_the_record(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    first, created = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    driven.clock.move(days=3)
    again, created_again = take_run(driven.services, APPROVER, VEHICLE, statement)
    assert (created, created_again) == (True, False)
    assert again == first
    assert everything_of(driven) == ([first], 1)


def test_other_content_under_a_known_key_is_refused_and_changes_nothing(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    first, _ = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    other = sealed(replace(statement, conditions=Conditions(note="afterthought")))
    for ask in (take_run, check_run):
        with pytest.raises(Conflict, match="known with other content"):
            ask(driven.services, TECHNICIAN, VEHICLE, other)
    assert everything_of(driven) == ([first], 1)


def test_a_key_belongs_to_one_vehicle(driven: DrivenVehicle) -> None:
    with_bits(driven, "tub-10", 32)
    statement = driven.state(straight(5.0))
    first, _ = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    second, created = take_run(driven.services, TECHNICIAN, "tub-10", statement)
    assert created
    assert first.run_id != second.run_id


def test_a_run_from_before_the_registration_is_read_by_the_first_version(driven: DrivenVehicle) -> None:
    run = driven.hand_in(straight(5.0), started_at=driven.clock() - timedelta(days=400))
    assert (run.vehicle_version, run.use) == (1, "usable")


def test_a_run_keeps_the_version_that_held_when_it_was_driven(driven: DrivenVehicle) -> None:
    before = driven.clock()
    driven.clock.move(days=1)
    put_vehicle(driven.services, APPROVER, VEHICLE, replace(STATEMENT, counter_bits=16), STATEMENT.etag())
    driven.clock.move(days=1)
    old = driven.hand_in(straight(5.0), started_at=before)
    new = driven.hand_in(straight(5.0))
    assert (old.vehicle_version, new.vehicle_version) == (1, 2)


def test_a_clock_a_little_ahead_is_no_reason_to_lose_a_run(driven: DrivenVehicle) -> None:
    assert driven.hand_in(straight(5.0), started_at=driven.clock() + timedelta(minutes=5)).use == "usable"


def test_a_sixteen_bit_counter_may_wrap_either_way(driven: DrivenVehicle) -> None:
    with_bits(driven, "tub-16", 16)
    rng = np.random.default_rng(3)
    there = statement_of(straight(12.0), TRUTH, rng, driven.clock(), "there", bits=16, start=60_000)
    back = statement_of([(-12.0, 0.0)], TRUTH, rng, driven.clock(), "back", bits=16, start=4_000)
    assert int(there.left_counts[0]) > int(there.left_counts[-1])
    for statement in (there, back):
        run, _ = take_run(driven.services, TECHNICIAN, "tub-16", statement)
        assert (run.use, run.distance_m) == ("usable", pytest.approx(12.0, rel=0.005))


def test_an_overlap_in_time_is_shown_and_not_refused(driven: DrivenVehicle) -> None:
    began = driven.clock() - timedelta(minutes=30)
    first = driven.hand_in(straight(5.0), started_at=began)
    second = driven.hand_in(straight(5.0), started_at=began + timedelta(seconds=5))
    apart = driven.hand_in(straight(5.0), started_at=second.ended_at)
    assert first.reasons == ()
    assert (second.use, second.reasons) == ("usable", (f"overlaps in time with run {first.run_key}",))
    assert apart.reasons == ()


def test_numbers_of_numpy_come_back_as_plain_numbers(driven: DrivenVehicle) -> None:
    statement = driven.state(spin(2.0))
    closure = statement.closure
    assert closure.heading_rad is not None
    assert closure.turns is not None
    given = replace(
        closure,
        heading_rad=np.float64(closure.heading_rad),
        turns=np.int64(closure.turns),
        x_m=np.float32(0.25),
    )
    run, _ = take_run(driven.services, TECHNICIAN, VEHICLE, sealed(replace(statement, closure=given)))
    with driven.services.read() as c:
        stored = runs.by_id(c, run.run_id)
    assert stored == run
    for one in (run, stored):
        values = [*vars(one.closure).values(), one.distance_m, one.turned_rad, one.duration_s, one.samples]
        assert {type(value) for value in values} <= {float, int, type(None)}
        json.dumps(vars(one.closure))


def test_the_digest_of_a_body_does_not_depend_on_the_order_of_its_fields() -> None:
    one = intake.content_digest({"run_key": "a", "closure": {"x_mm": 1.5, "turns": None}})
    other = intake.content_digest({"closure": {"turns": None, "x_mm": 1.5}, "run_key": "a"})
    changed = intake.content_digest({"closure": {"turns": None, "x_mm": 1.5}, "run_key": "a", "note": ""})
    assert one == other
    assert changed != one


# Closing error


def test_nothing_in_force_gives_no_misclosure(driven: DrivenVehicle) -> None:
    assert driven.hand_in(straight(5.0)).misclosure is None


def test_the_misclosure_is_by_what_was_in_force_when_the_run_was_driven(calibrated: DrivenVehicle) -> None:
    then = calibrated.clock() - timedelta(minutes=30)
    run = calibrated.hand_in(straight(10.0))
    values = Parameters(4.0e-4, 4.0e-4, 0.868)
    u_m = (4e-7, 4e-7, 0.001)
    made = propose_entered(calibrated.services, TECHNICIAN, VEHICLE, "entered", values, u_m, "wrongly typed")
    calibrated.put_in_force(made)
    calibrated.clock.move(minutes=10)
    old = calibrated.hand_in(straight(10.0), started_at=then)
    new = calibrated.hand_in(straight(10.0), started_at=calibrated.clock() - timedelta(minutes=2))
    for one, off_m in ((old, 0.0), (new, 10.0 - 10.0 * 4.0 / 3.5045)):
        assert one.misclosure is not None
        assert one.misclosure.x_m == pytest.approx(off_m, abs=0.03)
    assert run.misclosure is not None
    assert run.misclosure.x_m is not None
    assert run.misclosure.distance_m is None
    # 10 m: closure 5 mm and rolling noise 1.6 mm; four standard deviations.
    assert abs(run.misclosure.x_m) < 4 * math.hypot(0.005, 0.0016)


def test_a_run_from_before_anything_was_in_force_closes_by_what_is_in_force_now(calibrated: DrivenVehicle) -> None:
    early = calibrated.hand_in(straight(10.0), started_at=calibrated.clock() - timedelta(days=3))
    assert early.misclosure is not None
    assert early.misclosure.x_m == pytest.approx(0.0, abs=0.03)


def test_the_misclosure_shows_a_wrong_end_with_its_sign(calibrated: DrivenVehicle) -> None:
    run = calibrated.hand_in(straight(10.0), Reading(wrong_m=1.0))
    assert run.misclosure is not None
    assert run.misclosure.x_m == pytest.approx(1.0, abs=0.03)


def test_a_misclosure_has_only_what_was_measured(calibrated: DrivenVehicle) -> None:
    by_distance = calibrated.hand_in(straight(10.0), Reading(("distance",)))
    by_turn = calibrated.hand_in(spin(3.0), Reading(("heading",)))
    assert by_distance.misclosure is not None
    assert by_turn.misclosure is not None
    assert [value is not None for value in vars(by_distance.misclosure).values()] == [False, False, False, True]
    assert [value is not None for value in vars(by_turn.misclosure).values()] == [False, False, True, False]


def test_a_wrong_count_of_turns_is_a_misclosure_of_whole_turns(calibrated: DrivenVehicle) -> None:
    statement = calibrated.state(spin(3.0))
    wrong = replace(statement.closure, turns=2)
    run, _ = take_run(calibrated.services, TECHNICIAN, VEHICLE, sealed(replace(statement, closure=wrong)))
    assert run.misclosure is not None
    assert run.misclosure.heading_rad == pytest.approx(-2 * math.pi, abs=0.05)


# Who may


def test_a_vehicle_may_hand_in_its_own_runs_and_no_others(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    for ask in (take_run, check_run):
        with pytest.raises(NotAllowed, match="may not act for"):
            ask(driven.services, Actor("vehicle", "tub-10"), VEHICLE, statement)
    run, _ = take_run(driven.services, Actor("vehicle", VEHICLE), VEHICLE, statement)
    assert run.recorded_by == f"vehicle:{VEHICLE}"


def test_a_reader_may_not_hand_in_runs(driven: DrivenVehicle, reader: Actor) -> None:
    with pytest.raises(NotAllowed, match="technician"):
        take_run(driven.services, reader, VEHICLE, driven.state(straight(5.0)))


def test_a_run_of_an_unknown_vehicle_is_not_found(driven: DrivenVehicle) -> None:
    for ask in (take_run, check_run):
        with pytest.raises(NotFound, match="tub-99"):
            ask(driven.services, TECHNICIAN, "tub-99", driven.state(straight(5.0)))
