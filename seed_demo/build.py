"""Build the demo: simulate ahead in a second process, and live the days through the real procedures and passes.

Use ``from seed_demo.build import build_demo``.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import datetime
from multiprocessing import get_context

from registry.services import Services
from registry.storage import alerts
from seed_demo import deeds
from seed_demo.diary import Calendar, Entry, entries
from seed_demo.drives import DrivenRun, RunPlan, drive, plans, with_mishaps
from seed_demo.fleet import Vehicle
from seed_demo.saltworks import vehicles

#: Fewer days leave no room for a vehicle to have been silent for a month.
FEWEST_DAYS = 42
_BATCH = 8

Progress = Callable[[float, str], None]


@dataclass(frozen=True)
class DemoSummary:
    """What was built. ``alerts`` counts those that are open; the sign-in is the approver's."""

    vehicles: int
    runs: int
    alerts: int
    sign_in_name: str
    sign_in_password: str


def build_demo(
    services: Services,
    days: int = 180,
    progress: Progress | None = None,
    fleet: tuple[Vehicle, ...] | None = None,
    second_process: bool = True,
) -> DemoSummary:
    """Fill an empty, migrated home with the fleet's history up to now.

    Parameters
    ----------
    services : Services
        Of the home. Its clock says what today is; the past is lived through with clocks of its own.
    days : int
        Length of the history.
    progress : callable, optional
        Told the share done (0 to 1) and what is going on, once a day of the history.
    fleet : tuple of Vehicle, optional
        Some of :func:`seed_demo.saltworks.vehicles`; all of them by default.
    second_process : bool
        Simulate in a second process ahead of the replay. The outcome is the same without.

    Returns
    -------
    DemoSummary

    Raises
    ------
    ValueError
        When the history is too short for its stories.
    """
    if days < FEWEST_DAYS:
        raise ValueError(f"the demo needs a history of {FEWEST_DAYS} days or more, not {days}")
    fleet = vehicles() if fleet is None else fleet
    present = services.now()
    calendar = Calendar(present.date(), days)
    planned = _planned(fleet, calendar, present.timestamp())
    name, password = deeds.hire(_at(services, calendar.at(0, 0)))
    with _simulated(planned, second_process) as take:
        diary = [entry for entry in entries(fleet, planned, take, calendar, deeds.Memory()) if entry.at <= present]
        _live(services, diary, progress)
    deeds.evening_pass(services, deeds.Memory(), everybody=True)
    with services.read() as c:
        standing = len(alerts.all_open(c))
    return DemoSummary(len(fleet), len(planned), standing, name, password)


def _planned(fleet: tuple[Vehicle, ...], calendar: Calendar, until: float) -> list[RunPlan]:
    """Runs of the whole fleet that are handed in by now, in order of time."""
    found: list[RunPlan] = []
    for vehicle in fleet:
        found.extend(with_mishaps(list(plans(vehicle, calendar.days))))
    found = [plan for plan in found if calendar.at(plan.day, plan.second_of_day).timestamp() <= until]
    return sorted(found, key=lambda plan: (plan.day, plan.second_of_day, plan.run_key))


def _at(services: Services, moment: datetime) -> Services:
    """The same installation with its clock standing at a moment of the past."""
    return replace(services, now=lambda: moment)


def _live(services: Services, diary: list[Entry], progress: Progress | None) -> None:
    told = None
    for number, entry in enumerate(diary):
        if progress is not None and entry.at.date() != told:
            told = entry.at.date()
            progress(number / len(diary), f"living through {told.isoformat()}")
        entry.act(_at(services, entry.at))
    if progress is not None:
        progress(1.0, "the present day")


@contextmanager
def _simulated(planned: list[RunPlan], second_process: bool) -> Iterator[Callable[[RunPlan], DrivenRun]]:
    """Answers each plan's run in turn. Plans are asked for in the order given, so one stream serves them all."""
    if not second_process:
        yield drive
        return
    # Spawned, not forked: the caller may hold threads (a progress bar) and an open database.
    with ProcessPoolExecutor(max_workers=1, mp_context=get_context("spawn")) as pool:
        stream = pool.map(drive, planned, chunksize=_BATCH)

        def take(plan: RunPlan) -> DrivenRun:
            run = next(stream)
            if run.plan.run_key != plan.run_key:
                raise RuntimeError(f"the simulation answered {run.plan.run_key} where {plan.run_key} was due")
            return run

        try:
            yield take
        finally:
            pool.shutdown(wait=True, cancel_futures=True)
