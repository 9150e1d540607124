"""Taking runs in: what is refused, what is kept set aside and why, and what is answered."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from datetime import timedelta
from typing import Any

import numpy as np
import pytest

from registry.domain.person import Actor
from registry.domain.run import ClosureStatement, Conditions, Run
from registry.domain.vehicle import Parameters
from registry.errors import Conflict, Invalid, NotAllowed, NotFound, TooLarge
from registry.procedures import intake
from registry.procedures.baseline import propose_entered
from registry.procedures.intake import RunStatement, check_run, restore, set_aside, take_run
from registry.procedures.registration import put_vehicle
from registry.storage import counts_blob, journal, runs
from registry.storage.journal import JournalFilter
from tests.numerics.drives import Leg, half_loop, spin, straight
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

NO_READING = ClosureStatement(None, None, None, None, None, None, None)


def everything_of(driven: DrivenVehicle) -> tuple[list[Run], int]:
    with driven.services.read() as c:
        entries = journal.page(c, JournalFilter(action="run recorded"), 1000, None)
        return list(runs.page(c, driven.vehicle_id, 1000, None).items), len(entries.items)


def refusal_of(driven: DrivenVehicle, statement: RunStatement) -> Invalid:
    """The refusal of a statement, having seen that the check alone refuses it too and that nothing was stored."""
    with pytest.raises(Invalid) as refused:
        take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    with pytest.raises(Invalid):
        check_run(driven.services, TECHNICIAN, VEHICLE, statement)
    assert everything_of(driven) == ([], 0)
    return refused.value


def pointers_of(refusal: Invalid) -> list[str]:
    return [error.pointer for error in refusal.errors]


def with_bits(driven: DrivenVehicle, vehicle_id: str, bits: int, **more: Any) -> None:
    put_vehicle(driven.services, APPROVER, vehicle_id, replace(STATEMENT, counter_bits=bits, **more))


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


# Malformed: refused with field, sample and remedy

MALFORMED: dict[str, tuple[Callable[[RunStatement], RunStatement], str, str]] = {
    "no key": (lambda s: replace(s, run_key=""), "/run_key", "1 to 200 characters"),
    "a key too long": (lambda s: replace(s, run_key="k" * 201), "/run_key", "1 to 200 characters"),
    "a control character in the key": (lambda s: replace(s, run_key="a\x07b"), "/run_key", "control"),
    "half a letter in the key": (lambda s: replace(s, run_key="a\ud800"), "/run_key", "characters"),
    "a future time": (
        lambda s: replace(s, started_at=s.started_at + timedelta(days=1)),
        "/started_at",
        "check the clock",
    ),
    "a missing reading": (lambda s: replace(s, left_counts=s.left_counts[:-1]), "/left_counts", "must match"),
    "one sample": (
        lambda s: replace(s, time_s=s.time_s[:1], left_counts=s.left_counts[:1], right_counts=s.right_counts[:1]),
        "/time_s",
        "at least 2 samples",
    ),
    "no samples": (
        lambda s: replace(s, time_s=s.time_s[:0], left_counts=s.left_counts[:0], right_counts=s.right_counts[:0]),
        "/time_s",
        "at least 2 samples",
    ),
    "a time that is no number": (lambda s: with_time(s, 7, math.nan), "/time_s/7", "finite"),
    "a time without end": (lambda s: with_time(s, 9, math.inf), "/time_s/9", "finite"),
    "a time that goes back": (lambda s: with_time(s, 5, 0.05), "/time_s/5", "later than the sample before"),
    "a time that stands": (lambda s: with_time(s, 5, float(s.time_s[4])), "/time_s/5", "later than the sample before"),
    "times in milliseconds": (lambda s: replace(s, time_s=s.time_s * 1e6), "/time_s/last", "give seconds"),
    "times beyond any calendar": (lambda s: replace(s, time_s=s.time_s * 1e300), "/time_s/last", "give seconds"),
    "a negative reading": (lambda s: with_count(s, "left_counts", 3, -1), "/left_counts/3", "32-bit counter"),
    "a reading too large": (lambda s: with_count(s, "right_counts", 4, 1 << 32), "/right_counts/4", "counter_bits"),
    "no closure": (lambda s: replace(s, closure=NO_READING), "/closure", "at least one of"),
    "turns alone": (lambda s: replace(s, closure=replace(NO_READING, turns=3)), "/closure", "at least one of"),
    "no uncertainty of the place": (
        lambda s: closing(s, position_sd_m=None),
        "/closure/position_sd_mm",
        "standard uncertainty",
    ),
    "no uncertainty of the heading": (
        lambda s: closing(s, heading_sd_rad=None),
        "/closure/heading_sd_deg",
        "standard uncertainty",
    ),
    "an uncertainty of zero": (lambda s: closing(s, position_sd_m=0.0), "/closure/position_sd_mm", "above 0"),
    "an uncertainty too small to square": (
        lambda s: closing(s, heading_sd_rad=1e-200),
        "/closure/heading_sd_deg",
        "above 0",
    ),
    "a negative uncertainty": (lambda s: closing(s, heading_sd_rad=-0.1), "/closure/heading_sd_deg", "above 0"),
    "an uncertainty that is no number": (
        lambda s: closing(s, position_sd_m=math.nan),
        "/closure/position_sd_mm",
        "finite",
    ),
    "an uncertainty without end": (lambda s: closing(s, position_sd_m=math.inf), "/closure/position_sd_mm", "finite"),
    "an x that is no number": (lambda s: closing(s, x_m=math.nan), "/closure/x_mm", "finite"),
    "a y without end": (lambda s: closing(s, y_m=-math.inf), "/closure/y_mm", "finite"),
    "an x of another unit": (lambda s: closing(s, x_m=1e200), "/closure/x_mm", "check the unit"),
    "a heading beyond half a turn": (lambda s: closing(s, heading_rad=4.0), "/closure/heading_deg", "turns"),
    "a heading of minus half a turn": (lambda s: closing(s, heading_rad=-math.pi), "/closure/heading_deg", "-180"),
    "a negative distance": (lambda s: closing(s, distance_m=-1.0), "/closure/distance_mm", "negative"),
    "turns beyond counting": (lambda s: closing(s, turns=10**30), "/closure/turns", "whole turns"),
    "a load that is no number": (lambda s: replace(s, conditions=Conditions(load_kg=math.nan)), "/load_kg", "kg"),
    "a negative load": (lambda s: replace(s, conditions=Conditions(load_kg=-1.0)), "/load_kg", "kg"),
}


def with_time(statement: RunStatement, sample: int, time_s: float) -> RunStatement:
    times = statement.time_s.copy()
    times[sample] = time_s
    return replace(statement, time_s=times)


def with_count(statement: RunStatement, side: str, sample: int, reading: int) -> RunStatement:
    counts = getattr(statement, side).copy()
    counts[sample] = reading
    return replace(statement, **{side: counts})


def closing(statement: RunStatement, **fields: Any) -> RunStatement:
    return replace(statement, closure=replace(statement.closure, **fields))


@pytest.mark.parametrize("case", MALFORMED)
def test_a_malformed_run_is_refused_by_field_and_sample_and_leaves_nothing(driven: DrivenVehicle, case: str) -> None:
    spoil, pointer, remedy = MALFORMED[case]
    sound = driven.state([(10.0, 0.0), (4.0, 1.5)])
    refusal = refusal_of(driven, spoil(sound))
    told = [error.pointer for error in refusal.errors if remedy in error.detail]
    assert told == [pointer.replace("last", str(sound.time_s.size - 1))], refusal.errors


def test_every_fault_of_a_run_is_named_at_once(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    spoilt = closing(
        replace(statement, run_key="", started_at=statement.started_at + timedelta(days=2)), position_sd_m=None
    )
    assert pointers_of(refusal_of(driven, spoilt)) == ["/run_key", "/started_at", "/closure/position_sd_mm"]


def test_both_sides_out_of_range_are_both_named(driven: DrivenVehicle) -> None:
    statement = with_count(driven.state(straight(5.0)), "left_counts", 2, -5)
    assert pointers_of(refusal_of(driven, with_count(statement, "right_counts", 6, 1 << 40))) == [
        "/left_counts/2",
        "/right_counts/6",
    ]


def test_more_than_two_million_samples_are_too_many(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    many = np.zeros(2_000_001, dtype=np.int64)
    with pytest.raises(TooLarge, match="2,000,000 samples"):
        take_run(
            driven.services,
            TECHNICIAN,
            VEHICLE,
            replace(statement, time_s=np.arange(2_000_001) / 100.0, left_counts=many, right_counts=many),
        )
    assert everything_of(driven) == ([], 0)


def test_letters_of_every_script_may_stand_in_a_key(driven: DrivenVehicle) -> None:
    # A no-break space and a joined sign are no control characters, whatever "printable" means to a terminal.
    key = "Fahrt\u00a07 – 第二圈 👩\u200d🔧"
    statement = sealed(replace(driven.state(straight(5.0)), run_key=key))
    run, _ = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    with driven.services.read() as c:
        assert runs.find_by_key(c, VEHICLE, key) == run


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


# Well-formed but unusable: kept, set aside, with a reason


def taken(driven: DrivenVehicle, statement: RunStatement, vehicle_id: str = VEHICLE) -> Run:
    run, _ = take_run(driven.services, TECHNICIAN, vehicle_id, sealed(statement))
    return run


def test_a_run_without_motion_is_kept_and_set_aside(driven: DrivenVehicle) -> None:
    run = driven.hand_in([(0.004, 0.0)])
    assert run.use == "set aside"
    assert run.reasons == ("no motion: the sides rolled 4 mm",)
    with driven.services.read() as c:
        assert [state.use for state in runs.states(c, run.run_id)] == ["set aside"]
        assert runs.usable(c, VEHICLE) == []


def test_an_impossible_speed_names_side_and_sample_and_speed(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    counts = statement.left_counts.copy()
    counts[40:] += 9_000
    run = taken(driven, replace(statement, left_counts=counts))
    assert run.use == "set aside"
    assert run.reasons[0].startswith("impossible speed at sample 40: left 3")
    assert "m/s, at most 2 m/s; none of the usual mistakes" in run.reasons[0]


def test_a_counter_narrower_than_stated_is_named(driven: DrivenVehicle) -> None:
    rng = np.random.default_rng(5)
    statement = statement_of(straight(12.0), TRUTH, rng, driven.clock(), "narrow", bits=16, start=60_000)
    run = taken(driven, statement)
    assert run.use == "set aside"
    assert "fits as: counter of 16 bits, not 32" in run.reasons[0]


def test_a_counter_started_again_is_named(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(12.0))
    middle = statement.time_s.size // 2
    left, right = statement.left_counts + 3_000_000_000, statement.right_counts + 3_000_000_000
    left[middle:] -= left[middle]
    right[middle:] -= right[middle]
    run = taken(driven, replace(statement, left_counts=left, right_counts=right))
    assert run.use == "set aside"
    assert "fits as: counter started again from zero" in run.reasons[0]


@pytest.mark.parametrize(
    ("factor", "words"),
    [(2, "two counts for one on both sides"), (4, "four counts for one on both sides")],
)
def test_counts_decoded_too_often_are_named(driven: DrivenVehicle, factor: int, words: str) -> None:
    # The drive reaches 0.75 m/s: twice that is too fast.
    with_bits(driven, "tub-slow", 32, max_speed_m_per_s=0.9)
    statement = driven.state(straight(10.0))
    counted = {
        side: 5000 + factor * (getattr(statement, side) - getattr(statement, side)[0])
        for side in ("left_counts", "right_counts")
    }
    run = taken(driven, replace(statement, **counted), "tub-slow")
    assert run.use == "set aside"
    assert f"fits as: {words}" in run.reasons[0]


@pytest.mark.parametrize(
    ("side", "words"),
    [
        ("left_counts", "four counts for one on the left side"),
        ("right_counts", "four counts for one on the right side"),
    ],
)
def test_one_side_decoded_too_often_is_named(driven: DrivenVehicle, side: str, words: str) -> None:
    with_bits(driven, "tub-slow", 32, max_speed_m_per_s=0.9)
    statement = driven.state(straight(10.0))
    counts = getattr(statement, side)
    run = taken(driven, replace(statement, **{side: counts[0] + 4 * (counts - counts[0])}), "tub-slow")
    assert f"fits as: {words}" in run.reasons[0]


def test_sides_exchanged_are_named_where_the_sides_count_differently(driven: DrivenVehicle) -> None:
    # The left side counts four times as finely as the right: exchanged, the right one seems to race.
    nominal = Parameters(0.9e-4, 3.6e-4, 0.868)
    with_bits(driven, "tub-odd", 32, nominal=nominal, max_speed_m_per_s=1.0)
    truth = replace(TRUTH, left_m_per_tick=0.9e-4, right_m_per_tick=3.6e-4)
    sound = statement_of([(10.0, 0.0), (2.0, 0.5)], truth, np.random.default_rng(2), driven.clock(), "exchanged")
    crossed = replace(sound, left_counts=sound.right_counts, right_counts=sound.left_counts)
    assert "fits as: sides exchanged" in taken(driven, crossed, "tub-odd").reasons[0]


def test_what_would_be_possible_but_does_not_close_is_said_so(driven: DrivenVehicle) -> None:
    rng = np.random.default_rng(5)
    statement = statement_of(straight(12.0), TRUTH, rng, driven.clock(), "narrow", bits=16, start=60_000)
    away = replace(statement.closure, x_m=3.0)
    reason = taken(driven, replace(statement, closure=away)).reasons[0]
    assert "possible as: counter of 16 bits, not 32, but then it does not end where it was read" in reason


def test_a_jump_across_the_whole_counter_does_not_hold_up_the_intake(driven: DrivenVehicle) -> None:
    statement = driven.state(half_loop(4.0, 1))
    counts = statement.left_counts.copy()
    counts[50:] = (counts[50:] + (1 << 31) - 1) % (1 << 32)
    run = taken(driven, replace(statement, left_counts=counts))
    assert run.use == "set aside"
    with driven.services.read() as c:
        # Nothing to fold: the vehicle would have turned a million times between two samples.
        assert runs.maps(c, [run.run_id]) == {}


def test_steps_closer_than_a_clock_can_tell_are_no_fault_of_arithmetic(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    times = statement.time_s.copy()
    times[0], times[1] = 0.0, 5e-324
    counts = statement.left_counts.copy()
    counts[1:] += 1000
    assert (
        "impossible speed at sample 1" in taken(driven, replace(statement, time_s=times, left_counts=counts)).reasons[0]
    )


def test_a_log_of_two_samples_is_usable_unless_it_turns_thousands_of_times(driven: DrivenVehicle) -> None:
    def two(ticks_left: int, ticks_right: int, seconds: float, key: str) -> RunStatement:
        return sealed(
            replace(
                driven.state(straight(5.0)),
                run_key=key,
                started_at=driven.clock() - timedelta(days=20),
                time_s=np.array([0.0, seconds]),
                left_counts=np.array([0, ticks_left]),
                right_counts=np.array([0, ticks_right]),
            )
        )

    assert taken(driven, two(28_571, 28_571, 20.0, "straight")).use == "usable"
    assert taken(driven, two(0, 21_400, 20.0, "pivot")).use == "usable"
    day_long = taken(driven, two(0, 490_000_000, 86_400.0, "whirl"))
    assert day_long.use == "set aside"
    assert "log more often" in day_long.reasons[0]


# Set aside and restored


def test_a_technician_sets_aside_own_runs_and_an_approver_any(driven: DrivenVehicle) -> None:
    own, other = driven.hand_in(straight(5.0)), driven.hand_in(straight(6.0))
    colleague = Actor("person", "Tarek", "technician")
    with pytest.raises(NotAllowed, match="approver"):
        set_aside(driven.services, colleague, own.run_id, "slipped")
    changed = set_aside(driven.services, TECHNICIAN, own.run_id, "  slipped on the joint ")
    assert (changed.use, changed.reasons) == ("set aside", ("set aside by Tove: slipped on the joint",))
    assert set_aside(driven.services, APPROVER, other.run_id, "slipped").use == "set aside"
    with driven.services.read() as c:
        assert runs.by_id(c, own.run_id) == changed
        assert runs.usable(c, VEHICLE) == []


def test_only_an_approver_restores(driven: DrivenVehicle) -> None:
    run = driven.hand_in(straight(5.0))
    set_aside(driven.services, TECHNICIAN, run.run_id, "slipped")
    with pytest.raises(NotAllowed, match="approver"):
        restore(driven.services, TECHNICIAN, run.run_id, "it had not")
    restored = restore(driven.services, APPROVER, run.run_id, "it had not")
    assert (restored.use, restored.reasons) == ("usable", ())
    with driven.services.read() as c:
        assert [state.use for state in runs.states(c, run.run_id)] == ["usable", "set aside", "usable"]
        told = journal.page(c, JournalFilter(action="run restored"), 10, None).items[0]
    assert json.loads(told.what)["reason"] == "it had not"


@pytest.mark.parametrize("change", [set_aside, restore])
def test_a_reason_is_needed_and_a_change(driven: DrivenVehicle, change: Callable[..., Run]) -> None:
    run = driven.hand_in(straight(5.0))
    if change is restore:
        with pytest.raises(Conflict, match="already usable"):
            change(driven.services, APPROVER, run.run_id, "why not")
        set_aside(driven.services, APPROVER, run.run_id, "slipped")
    with pytest.raises(Invalid) as refused:
        change(driven.services, APPROVER, run.run_id, "   ")
    assert pointers_of(refused.value) == ["/reason"]
    change(driven.services, APPROVER, run.run_id, "seen on film")
    with pytest.raises(Conflict, match="already"):
        change(driven.services, APPROVER, run.run_id, "again")


def test_a_vehicle_may_not_set_its_own_runs_aside(driven: DrivenVehicle) -> None:
    actor = Actor("vehicle", VEHICLE)
    run, _ = take_run(driven.services, actor, VEHICLE, driven.state(straight(5.0)))
    with pytest.raises(NotAllowed):
        set_aside(driven.services, actor, run.run_id, "slipped")


def test_what_no_fit_could_take_is_not_restored(driven: DrivenVehicle) -> None:
    statement = driven.state(half_loop(4.0, 1))
    counts = statement.left_counts.copy()
    counts[50:] = (counts[50:] + (1 << 31) - 1) % (1 << 32)
    run = taken(driven, replace(statement, left_counts=counts))
    with pytest.raises(Conflict, match="counts jump too far"):
        restore(driven.services, APPROVER, run.run_id, "it was fine")


def test_a_run_restored_after_an_impossible_speed_can_be_fitted(driven: DrivenVehicle) -> None:
    leg: list[Leg] = [(8.0, 0.0), (2.0, 0.7)]
    with_bits(driven, "tub-slow", 32, max_speed_m_per_s=0.2)
    run, _ = take_run(driven.services, TECHNICIAN, "tub-slow", driven.state(leg))
    assert run.use == "set aside"
    restore(driven.services, APPROVER, run.run_id, "the stated top speed was wrong")
    with driven.services.read() as c:
        assert list(runs.maps(c, [run.run_id])) == [run.run_id]
