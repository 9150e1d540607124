"""The schedule: every process looks often whether a pass is due; the one that holds the lease makes it.

Several processes may run it. Each asks at a short interval for the lease; whoever holds it makes a pass over the fleet
when the last one, by whichever process, is long enough ago. The time of the last pass is in the record, so that a
restart neither forgets a pass nor makes one too many. The fencing number goes with every write of the pass: a process
that was asleep while another took over writes nothing.
"""

from __future__ import annotations

import os
import platform
import signal
import threading
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

import structlog
from apscheduler.events import EVENT_JOB_ERROR, EVENT_JOB_EXECUTED, EVENT_JOB_MISSED, JobExecutionEvent
from apscheduler.executors.pool import ThreadPoolExecutor
from apscheduler.schedulers.background import BackgroundScheduler

from registry import clock
from registry.jobs.fleet_pass import PassOutcome, run_pass
from registry.procedures.evaluation import Holder, LeaseLost
from registry.services import Services
from registry.storage import leases

LEASE = "fleet pass"
#: A lease lapses after this long without renewal: longer than any one vehicle takes, short enough to wait for.
LEASE_S = 180.0
_LOOK_EVERY_S = 30.0
_log = structlog.get_logger("registry.schedule")


@dataclass(frozen=True)
class Look:
    """What one look at the schedule came to: a pass, or why there was none."""

    at: datetime
    outcome: PassOutcome | None
    said: str


@dataclass
class Schedule:
    """A running schedule. ``looks`` and ``failures`` hold the last of each, newest last."""

    services: Services
    holder: str
    looks: deque[Look] = field(default_factory=lambda: deque(maxlen=50))
    failures: deque[BaseException] = field(default_factory=lambda: deque(maxlen=50))
    _scheduler: Any = None

    def stop(self) -> None:
        """Finish the pass that is running, start no other, and give the lease back. Safe to call twice."""
        if self._scheduler.running:
            self._scheduler.shutdown(wait=True)
            with self.services.write() as c:
                leases.release(c, LEASE, self.holder, self.services.now())


def start_schedule(services: Services) -> Schedule:
    """Start looking, in a thread of its own. The first look is made at once."""
    schedule = Schedule(services, f"{platform.node()}-{os.getpid()}-{services.new_id()}")
    scheduler = BackgroundScheduler(
        timezone="UTC",
        executors={"default": ThreadPoolExecutor(1)},
        job_defaults={"coalesce": True, "max_instances": 1, "misfire_grace_time": None},
    )
    scheduler.add_listener(_listener(schedule), EVENT_JOB_EXECUTED | EVENT_JOB_ERROR | EVENT_JOB_MISSED)
    look_every_s = min(_LOOK_EVERY_S, services.settings.evaluate_every_s)
    scheduler.add_job(
        lambda: look(services, schedule.holder), "interval", seconds=look_every_s, next_run_time=clock.now()
    )
    schedule._scheduler = scheduler
    scheduler.start()
    return schedule


def work_until_signal(services: Services, ready: Callable[[], None]) -> Schedule:
    """Run the schedule until SIGTERM or SIGINT; a pass that is running is finished. Belongs in the main thread.

    Parameters
    ----------
    ready
        Called once a signal would be heard and the schedule runs.

    Returns
    -------
    Schedule
        The stopped schedule, with what came of its looks.
    """
    asked = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda _number, _frame: asked.set())
    schedule = start_schedule(services)
    ready()
    asked.wait()
    schedule.stop()
    return schedule


def look(services: Services, holder: str) -> Look:
    """Take or renew the lease, and make a pass when one is due."""
    now = services.now()
    with services.read() as c:
        if not leases.is_free(c, LEASE, holder, now):
            return Look(now, None, "another process works")
    with services.write() as c:
        fence = leases.acquire(c, LEASE, holder, now, LEASE_S)
        last = leases.done_at(c, LEASE)
    if fence is None:
        return Look(now, None, "another process works")
    if last is not None and now - last < timedelta(seconds=services.settings.evaluate_every_s):
        return Look(now, None, "no pass is due")
    try:
        outcome = run_pass(services, progress=_renewing(services, holder, now), holder=Holder(LEASE, holder, fence))
    except LeaseLost:
        return Look(now, None, "another process took the pass over")
    with services.write() as c:
        leases.note_done(c, LEASE, holder, fence, now)
    return Look(now, outcome, "a pass was made")


def _renewing(services: Services, holder: str, begun: datetime) -> Callable[[int, int, str], None]:
    """Renews the lease during a long pass, after each vehicle when a third of its time has gone by."""
    renewed = begun

    def renew(_done: int, _of: int, _vehicle_id: str) -> None:
        nonlocal renewed
        now = services.now()
        if now - renewed > timedelta(seconds=LEASE_S / 3.0):
            with services.write() as c:
                leases.acquire(c, LEASE, holder, now, LEASE_S)
            renewed = now

    return renew


def _listener(schedule: Schedule) -> Callable[[JobExecutionEvent], None]:
    """Records how each look ended: apscheduler itself only writes failures to a logger."""

    def record(event: JobExecutionEvent) -> None:
        if event.code == EVENT_JOB_MISSED:
            _log.warning("a look at the schedule was missed", scheduled_at=str(event.scheduled_run_time))
        elif event.exception is not None:
            schedule.failures.append(event.exception)
            _log.error("the pass failed", error=repr(event.exception), traceback=event.traceback)
        else:
            done: Look = event.retval
            schedule.looks.append(done)
            if done.outcome is not None:
                outcome = done.outcome
                _log.info(
                    "a pass was made",
                    looked_at=outcome.looked_at,
                    evaluated=outcome.evaluated,
                    alerts_open=outcome.alerts_open,
                )

    return record
