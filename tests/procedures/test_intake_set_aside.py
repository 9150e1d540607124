"""Runs that are well-formed but unusable are kept, set aside with a reason; people set aside and restore too."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from registry.domain.person import Actor
from registry.domain.run import Run
from registry.domain.vehicle import Parameters
from registry.errors import Conflict, Invalid, NotAllowed
from registry.procedures.intake import RunStatement, restore, set_aside, take_run
from registry.storage import journal, runs
from registry.storage.journal import JournalFilter
from tests.numerics.drives import Leg, half_loop, straight
from tests.procedures.drives_on_record import (
    APPROVER,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
    sealed,
    statement_of,
)
from tests.procedures.hand_ins import (
    pointers_of,
    taken,
    with_bits,
)

# Well-formed but unusable: kept, set aside, with a reason


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
    assert " mm/s, at most 2000 mm/s; none of the usual mistakes" in run.reasons[0]


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


def test_a_counter_started_again_early_in_the_log_is_named(driven: DrivenVehicle) -> None:
    with_bits(driven, "tub-16", 16)
    statement = statement_of(
        straight(12.0), TRUTH, np.random.default_rng(5), driven.clock(), "early", bits=16, start=20
    )
    left = statement.left_counts.copy()
    early = int(np.argmax(left > 2500))
    left[early:] -= left[early]
    assert left.min() >= 0
    run = taken(driven, replace(statement, left_counts=left), "tub-16")
    assert f"at sample {early}: left" in run.reasons[0]
    assert "as: counter started again from zero" in run.reasons[0]


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
