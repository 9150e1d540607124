"""The invented fleet's plans, and what a planned run hands in."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from math import pi, tau

import numpy as np
import pytest

from registry.domain.maintenance import ENDS_WINDOW
from seed_demo.drives import (
    HEADING_SD_RAD,
    POSITION_SD_M,
    RunPlan,
    drive,
    last_run_day,
    plans,
    read_end,
    session_days,
    with_mishaps,
)
from seed_demo.fleet import Change, Vehicle
from seed_demo.saltworks import vehicles

FLEET = {vehicle.vehicle_id: vehicle for vehicle in vehicles()}


def _plans(vehicle: Vehicle, days: int = 180) -> list[RunPlan]:
    return with_mishaps(list(plans(vehicle, days)))


def test_the_fleet_has_twelve_to_twenty_vehicles_on_tracks_and_on_wheels_each_with_its_own_tale() -> None:
    assert 12 <= len(FLEET) <= 20
    assert {vehicle.make.drive for vehicle in FLEET.values()} == {"tracks", "wheels"}
    assert len({vehicle.story.tale for vehicle in FLEET.values()}) == len(FLEET)
    assert len({vehicle.seed for vehicle in FLEET.values()}) == len(FLEET)
    assert len({vehicle.serial for vehicle in FLEET.values()}) == len(FLEET)


def test_a_working_vehicle_drives_three_runs_a_week_beside_its_calibration_sessions() -> None:
    vehicle = FLEET["avocet"]
    planned = _plans(vehicle)
    sessions = session_days(vehicle, 180)
    assert Counter(plan.day in sessions for plan in planned)[True] == 12
    ordinary = [plan for plan in planned if plan.day not in sessions]
    assert len(ordinary) == pytest.approx(180 / 7 * 3, abs=3)
    assert {plan.reading for plan in planned} == {"pose", "point", "distance", "turns"}


def test_a_vehicle_laid_up_has_been_silent_for_more_than_a_month_even_in_a_short_history() -> None:
    for days in (42, 60, 180):
        assert days - max(plan.day for plan in _plans(FLEET["ruff"], days)) > 31
        assert last_run_day(FLEET["ruff"], days) > 1


def test_run_keys_are_unique_and_times_of_a_vehicle_do_not_collide() -> None:
    planned = [plan for vehicle in FLEET.values() for plan in _plans(vehicle)]
    assert len({plan.run_key for plan in planned}) == len(planned)
    assert len({(plan.vehicle.vehicle_id, plan.day, plan.second_of_day) for plan in planned}) == len(planned)


def test_the_same_plan_gives_the_same_log_and_another_plan_another() -> None:
    plan, other = _plans(FLEET["curlew"])[20:22]
    once, again, different = drive(plan), drive(plan), drive(replace(plan, seed=other.seed))
    assert np.array_equal(once.left_counts, again.left_counts)
    assert once.closure == again.closure
    assert once.closure != different.closure


def test_every_mishap_of_a_story_befalls_one_run() -> None:
    planned = _plans(FLEET["sanderling"])
    story = FLEET["sanderling"].story
    assert Counter(plan.fault for plan in planned if plan.fault) == Counter(fault for _, fault in story.faults)
    assert sum(plan.slip is not None for plan in planned) == len(story.slips)


def test_faulty_logs_jump_restart_or_stand_still() -> None:
    by_fault = {plan.fault: drive(plan) for plan in _plans(FLEET["sanderling"]) if plan.fault}
    still = by_fault["no motion"]
    assert np.ptp(still.left_counts) == 0
    assert np.ptp(still.right_counts) == 0
    restarted = by_fault["reset"]
    assert 0 in restarted.left_counts
    spiked = by_fault["spike"]
    assert np.sum(np.abs(np.diff(spiked.left_counts)) > 100_000) in (4, 5, 6)


def test_sixteen_bit_counters_wrap_in_most_runs() -> None:
    runs = [drive(plan) for plan in _plans(FLEET["redshank"])[:12]]
    assert max(int(run.left_counts.max()) for run in runs) < 1 << 16
    wrapped = sum(bool(np.any(np.abs(np.diff(run.left_counts)) > 1 << 15)) for run in runs)
    assert wrapped >= 9


def test_readings_scatter_as_stated() -> None:
    rng = np.random.default_rng(8)
    end = (12.0, -3.0, 2.5 + 2 * tau)
    read = [read_end(end, "pose", rng) for _ in range(2000)]
    # A standard deviation of 2,000 scatters by 1.6 %; five of those, and the rounding of the readings adds under 1 %.
    assert np.std([item.x_m or 0.0 for item in read]) == pytest.approx(POSITION_SD_M, rel=0.09)
    assert np.std([item.heading_rad or 0.0 for item in read]) == pytest.approx(HEADING_SD_RAD, rel=0.09)
    assert np.mean([item.heading_rad or 0.0 for item in read]) == pytest.approx(2.5, abs=5e-4)
    assert all(item.turns is None for item in read)


@pytest.mark.parametrize("turn", [pi, -pi, 3 * pi, -8 * pi, 8 * pi - 0.001])
def test_counted_turns_and_heading_add_up_to_the_total_turn(turn: float) -> None:
    read = read_end((0.0, 0.0, turn), "turns", np.random.default_rng(3), heading_sd_rad=1e-9)
    assert read.turns is not None
    assert read.heading_rad is not None
    assert -pi < read.heading_rad <= pi
    assert tau * read.turns + read.heading_rad == pytest.approx(turn, abs=5e-4)


def test_changes_ramp_evenly_and_steps_happen_at_once() -> None:
    ramp, step = Change(0.2, 0.6, left=0.01), Change(0.5, 0.5, width=0.02)
    assert [ramp.done(share) for share in (0.1, 0.2, 0.4, 0.6, 0.9)] == pytest.approx([0.0, 0.0, 0.5, 1.0, 1.0])
    assert [step.done(share) for share in (0.49, 0.5, 1.0)] == [0.0, 1.0, 1.0]


def test_work_that_changes_a_vehicle_ends_the_window_and_meets_its_change_on_that_day() -> None:
    for vehicle in FLEET.values():
        for work in vehicle.story.works:
            changes = [change.first for change in vehicle.story.changes if change.first == change.last]
            assert ENDS_WINDOW[work.kind] == (work.share in changes)
