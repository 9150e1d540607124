"""Passes over the fleet, and replays of passes over the past."""

from __future__ import annotations

from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from pathlib import Path

import pytest

from registry.domain.alert import Alert, AlertContent
from registry.domain.evaluation import Evaluation
from registry.domain.vehicle import Parameters
from registry.errors import Invalid, NotFound
from registry.jobs.fleet_pass import PassOutcome, replay, run_pass
from registry.procedures import upkeep
from registry.procedures.alerting import acknowledge
from registry.procedures.baseline import propose_entered
from registry.procedures.evaluation import Holder, LeaseLost
from registry.procedures.intake import RunStatement, set_aside, take_run
from registry.services import Services
from registry.storage import alerts, evaluations, leases
from registry.storage import runs as run_store
from registry.storage.engine import Connection
from registry.storage.tables import run_counts, run_maps
from tests.conftest import StandingClock
from tests.numerics.drives import straight
from tests.procedures.drives_on_record import (
    APPROVER,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    WORK,
    DrivenVehicle,
    on_a_copy,
    registered,
)

DAY = timedelta(days=1)


@dataclass(frozen=True)
class Fleet:
    """Three vehicles: one calibrated, one with values entered by hand, one with nothing in force."""

    services: Services
    clock: StandingClock
    first: DrivenVehicle
    second: DrivenVehicle
    third: DrivenVehicle

    @property
    def all(self) -> tuple[DrivenVehicle, ...]:
        return (self.first, self.second, self.third)


@pytest.fixture
def fleet(calibrated: DrivenVehicle) -> Fleet:
    services, clock = calibrated.services, calibrated.clock
    second = registered(services, clock, "tub-10", seed=10)
    values = Parameters(*(float(value) for value in TRUTH.parameters))
    u_m = (7e-8, 7e-8, 2e-4)
    second.put_in_force(propose_entered(services, TECHNICIAN, "tub-10", "entered", values, u_m, None))
    return Fleet(services, clock, calibrated, second, registered(services, clock, "tub-11", seed=11))


def history(services: Services, vehicle_id: str = VEHICLE) -> list[Evaluation]:
    with services.read() as c:
        return evaluations.history(c, vehicle_id)


def all_alerts(services: Services, vehicle_id: str = VEHICLE) -> list[Alert]:
    with services.read() as c:
        return list(alerts.page(c, "all", vehicle_id, 1000, None).items)


def never_writing(services: Services) -> Services:
    def write() -> AbstractContextManager[Connection]:
        raise AssertionError("something was written")

    return replace(services, write=write)


# One pass


def test_a_pass_fits_the_vehicles_with_something_new_and_counts_what_it_found(fleet: Fleet) -> None:
    fleet.first.change(left=0.01, right=0.01)
    for vehicle in fleet.all:
        vehicle.work(5)
    told: list[tuple[int, int, str]] = []
    outcome = run_pass(fleet.services, progress=lambda *one: told.append(one))
    assert outcome == PassOutcome(fleet.clock(), 3, 2, {"beyond": 1, "within": 1}, 1)
    assert told == [(1, 3, "tub-10"), (2, 3, "tub-11"), (3, 3, "tub-9")]
    fleet.second.work(1)
    again = run_pass(fleet.services)
    assert (again.looked_at, again.evaluated, again.findings) == (3, 1, {"within": 1})
    assert [len(history(fleet.services, vehicle.vehicle_id)) for vehicle in fleet.all] == [1, 2, 0]
    assert upkeep.check(fleet.services) == []


def test_a_pass_over_a_quiet_fleet_writes_nothing(fleet: Fleet) -> None:
    for vehicle in fleet.all:
        vehicle.work(2)
    run_pass(fleet.services)
    fleet.clock.move(days=2)
    outcome = run_pass(never_writing(fleet.services))
    assert (outcome.looked_at, outcome.evaluated) == (3, 0)


def test_a_pass_asks_every_vehicle_for_silence(fleet: Fleet) -> None:
    fleet.clock.move(days=31)
    outcome = run_pass(fleet.services)
    assert (outcome.evaluated, outcome.alerts_open) == (0, 3)
    assert [one.content.kind for vehicle in fleet.all for one in all_alerts(fleet.services, vehicle.vehicle_id)] == [
        "no_evidence"
    ] * 3


def test_a_pass_over_some_vehicles_looks_at_each_of_them_once(fleet: Fleet) -> None:
    for vehicle in fleet.all:
        vehicle.work(2)
    outcome = run_pass(fleet.services, vehicle_ids=("tub-10", "tub-10"))
    assert (outcome.looked_at, outcome.evaluated) == (1, 1)
    assert history(fleet.services) == []


def test_an_unknown_vehicle_is_named_before_anything_is_looked_at(fleet: Fleet) -> None:
    fleet.second.work(2)
    with pytest.raises(NotFound, match="tub-99"):
        run_pass(fleet.services, vehicle_ids=("tub-10", "tub-99"))
    assert history(fleet.services, "tub-10") == []


def test_a_pass_does_not_judge_the_future(fleet: Fleet) -> None:
    with pytest.raises(Invalid) as refused:
        run_pass(fleet.services, fleet.clock() + timedelta(seconds=1))
    assert [error.pointer for error in refused.value.errors] == ["/as_of"]


def test_a_vehicle_that_cannot_be_evaluated_does_not_silence_the_others(fleet: Fleet) -> None:
    for vehicle in fleet.all:
        vehicle.work(2)
    (damaged,) = fleet.second.work(1)
    with fleet.services.write() as c:
        c.execute(run_maps.delete().where(run_maps.c.run_id == damaged.run_id))
        c.execute(run_counts.update().where(run_counts.c.run_id == damaged.run_id).values(counts=b"\x01torn"))
    with pytest.raises(ExceptionGroup, match="1 of 3 vehicles could not be evaluated") as failed:
        run_pass(fleet.services)
    (fault,) = failed.value.exceptions
    assert "damaged" in str(fault)
    assert any("tub-10" in note for note in fault.__notes__)
    assert [len(history(fleet.services, one.vehicle_id)) for one in fleet.all] == [1, 0, 0]


def test_a_pass_that_loses_its_lease_ends_and_leaves_the_rest_to_the_other(fleet: Fleet) -> None:
    for vehicle in fleet.all:
        vehicle.work(2)
    with fleet.services.write() as c:
        fence = leases.acquire(c, "fleet pass", "one", fleet.clock(), 60.0)
    assert fence is not None

    def another_takes_over(done: int, _of: int, _vehicle_id: str) -> None:
        if done == 1:
            fleet.clock.move(minutes=2)
            with fleet.services.write() as c:
                leases.acquire(c, "fleet pass", "two", fleet.clock(), 60.0)

    with pytest.raises(LeaseLost):
        run_pass(fleet.services, progress=another_takes_over, holder=Holder("fleet pass", "one", fence))
    assert [len(history(fleet.services, vehicle.vehicle_id)) for vehicle in fleet.all] == [0, 1, 0]


# Replays


@dataclass(frozen=True)
class Told:
    """What a vehicle's history says, without identities and times of writing."""

    evaluations: list[tuple[object, ...]]
    alerts: list[tuple[object, ...]]


def told(services: Services) -> Told:
    return Told(
        [
            (
                one.as_of,
                one.result.finding,
                one.result.runs_used,
                one.result.message,
                one.proposed_calibration_id is not None,
            )
            for one in history(services)
        ],
        [
            (one.content, one.standing, one.raised_at, [(e.at, e.what, e.note) for e in one.history])
            for one in all_alerts(services)
        ],
    )


def days_of_driving(driven: DrivenVehicle, days: int) -> list[tuple[datetime, RunStatement]]:
    """A run a day at noon, handed in ten minutes after it began: good, then off by 1 %, silent for a month, good."""
    begin, made = driven.clock(), []
    for day in range(days):
        if day == 8:
            driven.change(left=0.01, right=0.01)
        if day == 16:
            driven.truth = TRUTH
            begin += timedelta(days=33)
        at = begin + day * DAY + timedelta(hours=12)
        made.append((at, driven.state(WORK[day % 5], started_at=at - timedelta(minutes=10))))
    return made


def live_through(driven: DrivenVehicle, runs: list[tuple[datetime, RunStatement]], passes: list[datetime]) -> None:
    """Hand in each run and make each pass at its time."""
    moments = sorted([(at, 0, run) for at, run in runs] + [(at, 1, None) for at in passes], key=lambda one: one[:2])
    for at, _, run in moments:
        driven.clock.time = at
        if run is None:
            run_pass(driven.services)
        else:
            take_run(driven.services, TECHNICIAN, VEHICLE, run)


def hand_in_all(driven: DrivenVehicle, runs: list[tuple[datetime, RunStatement]]) -> None:
    driven.clock.time = runs[-1][0] + 10 * DAY
    for _, run in runs:
        take_run(driven.services, TECHNICIAN, VEHICLE, run)


def daily(begin: datetime, end: datetime) -> list[datetime]:
    return [begin + number * DAY for number in range((end - begin) // DAY + 1)]


@pytest.fixture
def twins(calibrated_file: Path, tmp_path: Path) -> tuple[DrivenVehicle, DrivenVehicle]:
    """The same vehicle on two records of its own, with a window of five runs."""
    made = [
        on_a_copy(calibrated_file, tmp_path / name, StandingClock(), window_runs=5) for name in ("lived", "replayed")
    ]
    return made[0], made[1]


def test_a_replay_finds_what_living_through_it_found(twins: tuple[DrivenVehicle, DrivenVehicle]) -> None:
    lived, replayed = twins
    begin = lived.clock()
    runs = days_of_driving(lived, 24)
    passes = daily(begin, runs[-1][0] + DAY)
    live_through(lived, runs, passes)
    hand_in_all(replayed, runs)
    outcomes = replay(replayed.services, passes[0], passes[-1], DAY)
    assert [outcome.as_of for outcome in outcomes] == passes
    was, now = told(lived.services), told(replayed.services)
    assert now.evaluations == was.evaluations
    assert [row[1:] for row in now.alerts] == [row[1:] for row in was.alerts]
    for (told_now, *_), (told_then, *_) in zip(now.alerts, was.alerts, strict=True):
        # Maps that were folded around other values differ by less than they may: a two-hundredth of a millimetre.
        assert vars(replace_figures(told_now)) == vars(replace_figures(told_then))
    # The history has something to say: all three findings, an alert that was raised and returned, and a silence.
    assert {row[1] for row in was.evaluations} >= {"within", "beyond", "cannot_tell"}
    causes = {alert.content.cause(): alert.standing for alert in all_alerts(lived.services)}
    assert causes["beyond_tolerance:tick_factor"] == "returned"
    assert causes["no_evidence"] == "returned"
    assert upkeep.check(replayed.services) == []


def replace_figures(content: AlertContent) -> AlertContent:
    return replace(content, size=None, u=None, probability_beyond=None)


def test_a_replay_again_changes_nothing(twins: tuple[DrivenVehicle, DrivenVehicle]) -> None:
    _, driven = twins
    begin = driven.clock()
    runs = days_of_driving(driven, 20)
    hand_in_all(driven, runs)
    replay(driven.services, begin, runs[-1][0] + DAY, DAY)
    before = told(driven.services)
    replay(driven.services, begin, runs[-1][0] + DAY, DAY)
    assert told(driven.services) == before
    # In other steps the same evidence is met at other times, and only what is new to them is written.
    replay(driven.services, begin + DAY / 2, runs[-1][0] + DAY, DAY)
    assert told(driven.services).alerts == before.alerts


def test_a_replay_after_a_pass_of_today_is_history(twins: tuple[DrivenVehicle, DrivenVehicle]) -> None:
    _, driven = twins
    begin = driven.clock()
    runs = days_of_driving(driven, 24)
    hand_in_all(driven, runs)
    run_pass(driven.services)
    before = all_alerts(driven.services)
    assert before == []
    replay(driven.services, begin, runs[-1][0] + DAY, DAY)
    findings = [one.result.finding for one in history(driven.services)]
    assert "beyond" in findings
    assert all_alerts(driven.services) == []
    # The next pass has nothing new and finds the present as it was.
    assert run_pass(driven.services).evaluated == 0
    assert all_alerts(driven.services) == []


def test_a_replay_goes_on_after_somebody_has_seen_its_alerts(twins: tuple[DrivenVehicle, DrivenVehicle]) -> None:
    _, driven = twins
    begin = driven.clock()
    runs = days_of_driving(driven, 24)
    hand_in_all(driven, runs)
    half = begin + 15 * DAY
    replay(driven.services, begin, half, DAY)
    (alert,) = all_alerts(driven.services)
    assert (alert.standing, begin < alert.raised_at <= half) == ("unacknowledged", True)
    acknowledge(driven.services, TECHNICIAN, alert.alert_id, "seen today, long after")
    replay(driven.services, half + DAY, runs[-1][0] + DAY, DAY)
    now = {one.content.cause(): one for one in all_alerts(driven.services)}
    assert now["beyond_tolerance:tick_factor"].standing == "closed"


def test_a_replay_knows_what_is_known_now(twins: tuple[DrivenVehicle, DrivenVehicle]) -> None:
    _, driven = twins
    begin = driven.clock()
    runs = days_of_driving(driven, 7)
    hand_in_all(driven, runs)
    with driven.services.read() as c:
        third = run_store.usable(c, VEHICLE, ended_until=runs[2][0])[0]
    set_aside(driven.services, APPROVER, third.run_id, "slipped")
    replay(driven.services, begin, runs[-1][0], DAY)
    # On the third day there was something new, a run that is set aside by now.
    assert [one.result.runs_used for one in history(driven.services)] == [1, 2, 2, 3, 4, 5]


def test_a_replay_tells_its_progress_and_stays_within_its_span(fleet: Fleet) -> None:
    fleet.first.work(2)
    end = fleet.clock()
    said: list[tuple[int, int, str]] = []
    outcomes = replay(
        fleet.services, end - timedelta(hours=25), end, timedelta(hours=6), (VEHICLE,), lambda *one: said.append(one)
    )
    assert [outcome.as_of for outcome in outcomes] == [end - timedelta(hours=25 - 6 * n) for n in range(5)]
    assert [one[:2] for one in said] == [(n, 5) for n in range(1, 6)]
    assert said[0][2] == f"{end - timedelta(hours=25):%Y-%m-%d %H:%M}"
    assert all(outcome.looked_at == 1 for outcome in outcomes)
    assert all(one.as_of <= end for one in history(fleet.services))


@pytest.mark.parametrize(
    ("span", "every", "pointer"),
    [
        ((-2.0, -1.0), timedelta(0), "/every"),
        ((-2.0, -1.0), -DAY, "/every"),
        ((-1.0, -2.0), DAY, "/to"),
        ((-1.0, 0.1), DAY, "/to"),
    ],
)
def test_a_span_that_cannot_be_replayed_is_refused_by_name(
    fleet: Fleet, span: tuple[float, float], every: timedelta, pointer: str
) -> None:
    fleet.first.hand_in(straight(10.0))
    now = fleet.clock()
    with pytest.raises(Invalid) as refused:
        replay(fleet.services, now + span[0] * DAY, now + span[1] * DAY, every)
    assert [error.pointer for error in refused.value.errors] == [pointer]
    assert history(fleet.services) == []
