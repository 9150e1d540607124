"""The schedule on a real record, with real processes where processes matter."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
import structlog

from registry.clock import now as real_now
from registry.jobs.scheduler import LEASE, LEASE_S, Schedule, look, start_schedule
from registry.services import Services
from registry.storage import leases

WAIT_S = 20.0


def until(happened: Callable[[], bool], wait_s: float = WAIT_S) -> None:
    end = time.monotonic() + wait_s
    while not happened():
        assert time.monotonic() < end, f"did not happen within {wait_s} s"
        time.sleep(0.02)


def test_the_first_look_makes_a_pass_and_the_next_one_waits_until_it_is_due(services, clock, vehicle):
    assert look(services, "one").said == "a pass was made"
    clock.move(hours=1)
    assert look(services, "one").said == "no pass is due"
    clock.move(hours=5)
    assert look(services, "one").said == "a pass was made"


def test_a_pass_is_due_by_the_record_whichever_process_made_the_last_one(services, clock, vehicle):
    assert look(services, "one").outcome is not None
    clock.move(seconds=LEASE_S + 1)
    assert look(services, "two").said == "no pass is due"
    clock.move(hours=6)
    assert look(services, "two").said == "a pass was made"


def test_of_two_processes_one_works_until_its_lease_lapses(services, clock, vehicle):
    assert look(services, "one").outcome is not None
    clock.move(seconds=LEASE_S - 1)
    assert look(services, "two").said == "another process works"
    clock.move(seconds=2)
    assert look(services, "two").said == "no pass is due"
    assert look(services, "one").said == "another process works"


def test_a_pass_looks_at_every_vehicle(services, clock, vehicle):
    outcome = look(services, "one").outcome
    assert outcome is not None
    assert outcome.looked_at == 1


def test_a_started_schedule_looks_at_once_and_gives_the_lease_back_when_stopped(make_home):
    services = replace(make_home(evaluate_every_s=0.2), now=real_now)
    schedule = start_schedule(services)
    until(lambda: sum(one.outcome is not None for one in schedule.looks) >= 2)
    schedule.stop()
    assert not schedule.failures
    with services.read() as c:
        assert leases.is_free(c, LEASE, "another", real_now())
    made = len(schedule.looks)
    time.sleep(0.5)
    assert len(schedule.looks) == made
    schedule.stop()


def test_a_failing_pass_is_recorded_and_the_schedule_goes_on(make_home):
    services = replace(make_home(evaluate_every_s=0.2), now=real_now)
    with services.write() as c:
        c.exec_driver_sql("ALTER TABLE alerts RENAME TO lost")
    with structlog.testing.capture_logs() as said:
        schedule = start_schedule(services)
        until(lambda: len(schedule.failures) >= 2)
        with services.write() as c:
            c.exec_driver_sql("ALTER TABLE lost RENAME TO alerts")
        until(lambda: any(one.outcome is not None for one in schedule.looks))
        schedule.stop()
    assert "no such table" in str(schedule.failures[0])
    assert "the pass failed" in [one["event"] for one in said]


WORKER = """
import sys
from dataclasses import replace
from pathlib import Path
from registry.jobs import scheduler
from registry.services import make_services
from registry.settings import Settings

settings = replace(Settings.from_environment(Path(sys.argv[1])), evaluate_every_s=0.3)
schedule = scheduler.work_until_signal(make_services(settings), lambda: print("started", flush=True))
passes = sum(one.outcome is not None for one in schedule.looks)
waits = sum(one.said == "another process works" for one in schedule.looks)
print(passes, waits, len(schedule.failures), flush=True)
"""


def start_worker(home: Path) -> subprocess.Popen[str]:
    worker = subprocess.Popen(
        [sys.executable, "-W", "error", "-c", WORKER, str(home)], stdout=subprocess.PIPE, text=True, env={**os.environ}
    )
    assert worker.stdout is not None
    assert worker.stdout.readline() == "started\n"
    return worker


def stop_worker(worker: subprocess.Popen[str]) -> tuple[int, int, int]:
    worker.send_signal(signal.SIGTERM)
    said, _ = worker.communicate(timeout=WAIT_S)
    assert worker.returncode == 0
    passes, waits, failures = (int(word) for word in said.splitlines()[-1].split())
    return passes, waits, failures


@pytest.mark.slow
def test_of_two_worker_processes_one_works_and_the_other_takes_over_after_sigterm(services: Services, vehicle):
    first = start_worker(services.settings.home)
    time.sleep(1.5)
    second = start_worker(services.settings.home)
    time.sleep(1.5)
    passes, _waits, failures = stop_worker(first)
    assert passes >= 2
    assert failures == 0
    time.sleep(1.5)
    passes, waits, failures = stop_worker(second)
    assert waits >= 1
    assert passes >= 1
    assert failures == 0


def test_stopping_waits_for_the_pass_that_is_running(make_home):
    services = replace(make_home(evaluate_every_s=3600.0), now=real_now)
    begun: list[float] = []
    ended: list[float] = []

    def slow_now():
        if begun and not ended:
            time.sleep(0.5)
            ended.append(time.monotonic())
        begun.append(time.monotonic())
        return real_now()

    schedule: Schedule = start_schedule(replace(services, now=slow_now))
    until(lambda: bool(begun))
    schedule.stop()
    assert ended
    assert any(one.outcome is not None for one in schedule.looks)
