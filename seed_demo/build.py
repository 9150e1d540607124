"""Build the demo: live the days of the invented fleet through the real procedures and passes.

Use ``from seed_demo.build import build_demo``.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import dataclass, replace
from datetime import datetime

from registry.services import Services
from registry.storage import alerts
from seed_demo import deeds
from seed_demo.beside import MakePass, Take, pass_here, passes_shared, simulated_ahead
from seed_demo.diary import Calendar, Entry, entries
from seed_demo.drives import RunPlan, drive, plans, with_mishaps
from seed_demo.fleet import Vehicle
from seed_demo.saltworks import vehicles

#: A week has room for every vehicle's calibration; the stories need a quarter of a year to be told to their end.
FEWEST_DAYS = 7

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
    second_processes: bool = True,
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
    second_processes : bool
        Simulate ahead of the replay and share the passes in processes beside it. The outcome is the same without.

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
    with ExitStack() as stack:
        take: Take = drive
        make_pass: MakePass = pass_here
        if second_processes:
            take = stack.enter_context(simulated_ahead(planned))
            make_pass = stack.enter_context(passes_shared(services.settings))
        # Passwords take their time to hash; meanwhile the other processes start and the first runs are simulated.
        name, password = deeds.hire(_at(services, calendar.at(0, 0)))
        memory = deeds.Memory()
        diary = [one for one in entries(fleet, planned, (take, make_pass), calendar, memory) if one.at <= present]
        _live(services, diary, progress)
        deeds.evening_pass(services, memory, make_pass, everybody=True)
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
