"""The days of the demo: who does what when, in order of time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from functools import partial

from registry.services import Services
from seed_demo import deeds
from seed_demo.beside import MakePass, Take
from seed_demo.deeds import Memory
from seed_demo.drives import RunPlan, arrival_day, is_measuring_day, last_run_day, session_days, sister_of
from seed_demo.fleet import Vehicle

Act = Callable[[Services], None]

#: Seconds of a day.
_REGISTERED, _STARTED_UP, _WORKED = 6 * 3600, 6 * 3600 + 1800, 7 * 3600 + 900
_DESK, _DECIDED, _PASSED = 7 * 3600 + 2700, 15 * 3600, 20 * 3600
#: A pass over the whole fleet each week, one over the vehicles with something new each evening, and a start every other
#: week keep the building short; daily passes over all would find the same.
_WHOLE_FLEET_EVERY_DAYS = 7
_START_EVERY_DAYS = 14


@dataclass(frozen=True)
class Entry:
    """One act at one moment. ``order`` keeps entries of one moment in a fixed order."""

    at: datetime
    order: int
    act: Act


@dataclass(frozen=True)
class Calendar:
    """Day numbers to moments: day ``days`` is today."""

    today: date
    days: int

    def at(self, day: int, second: int) -> datetime:
        midnight = datetime.combine(self.today - timedelta(days=self.days - day), time(), UTC)
        return midnight + timedelta(seconds=second)

    def day_of(self, share: float) -> int:
        return round(share * self.days)


def entries(
    fleet: tuple[Vehicle, ...],
    planned: list[RunPlan],
    by: tuple[Take, MakePass],
    calendar: Calendar,
    memory: Memory,
) -> list[Entry]:
    """All that happens to a fleet, sorted by time. ``by`` answers a run when it is due, and makes the passes."""
    take, make_pass = by
    found: list[tuple[datetime, Act]] = [
        (calendar.at(plan.day, plan.second_of_day), partial(_hand_in, plan, take, memory)) for plan in planned
    ]
    for vehicle in fleet:
        found.extend(_of_vehicle(fleet, vehicle, calendar, memory))
    for day in range(calendar.days + 1):
        found.append((calendar.at(day, _DESK), partial(deeds.morning_desk, fleet=fleet, memory=memory)))
        everybody = day % _WHOLE_FLEET_EVERY_DAYS == 0
        found.append(
            (
                calendar.at(day, _PASSED),
                partial(deeds.evening_pass, memory=memory, make_pass=make_pass, everybody=everybody),
            )
        )
    ordered = sorted(enumerate(found), key=lambda item: (item[1][0], item[0]))
    return [Entry(at, order, act) for order, (at, act) in ordered]


def _hand_in(plan: RunPlan, take: Take, memory: Memory, services: Services) -> None:
    deeds.hand_in(services, take(plan), memory)


def _of_vehicle(
    fleet: tuple[Vehicle, ...], vehicle: Vehicle, calendar: Calendar, memory: Memory
) -> Iterator[tuple[datetime, Act]]:
    """Registration, starts, work, baselines and what the story asks for beside."""
    story = vehicle.story
    first = arrival_day(vehicle, calendar.days)
    sessions = session_days(vehicle, calendar.days)
    borrowed = None if sessions else sister_of(vehicle, fleet)
    yield (
        calendar.at(first, _REGISTERED),
        partial(deeds.register, vehicle=vehicle, borrowed_from=borrowed, memory=memory),
    )
    yield from _starts(vehicle, calendar, memory)
    for done in story.works:
        yield (
            calendar.at(calendar.day_of(done.share), _WORKED),
            partial(deeds.work, vehicle=vehicle, done=done, memory=memory),
        )
    for day in sessions:
        yield calendar.at(day, _DECIDED), partial(_decide, vehicle, day, day == first, memory)
    if story.wrong_entry is not None:
        day = calendar.day_of(story.wrong_entry.share)
        # On the eve of its day on the slab, so that runs speak against the wrong entry before it is withdrawn.
        day = next(eve for eve in range(day, day + 7) if is_measuring_day(vehicle, eve + 1))
        yield calendar.at(day, _DECIDED), partial(deeds.enter_wrongly, vehicle=vehicle, memory=memory)
        later = calendar.at(day + story.wrong_entry.days, _DECIDED)
        yield later, partial(deeds.withdraw_wrong, vehicle=vehicle, memory=memory)
    if story.set_aside_by_hand is not None:
        noticed = calendar.at(calendar.day_of(story.set_aside_by_hand), _DECIDED)
        yield noticed, partial(deeds.set_aside_last, vehicle=vehicle, memory=memory)


def _starts(vehicle: Vehicle, calendar: Calendar, memory: Memory) -> Iterator[tuple[datetime, Act]]:
    """Starts on the vehicle's first day, and on every other of its measuring days while it works."""
    story = vehicle.story
    first = arrival_day(vehicle, calendar.days)
    last = last_run_day(vehicle, calendar.days)
    if story.deaf_from is not None:
        yield calendar.at(calendar.day_of(story.deaf_from), 0), partial(deeds.go_deaf, vehicle=vehicle, memory=memory)
    for day in range(first, last + 1):
        if day == first or (is_measuring_day(vehicle, day) and day % _START_EVERY_DAYS < 7):
            act = partial(deeds.start_up, vehicle=vehicle, memory=memory)
            yield calendar.at(day, _STARTED_UP + 60 * vehicle.place), act


def _decide(vehicle: Vehicle, day: int, first: bool, memory: Memory, services: Services) -> None:
    """Fit the runs of the session: all there are after new parts, only the day's own when nothing was exchanged."""
    if first or vehicle.story.works:
        reason = "first baseline" if first else "new baseline after the work"
        deeds.set_new_baseline(services, vehicle, memory, None, reason)
        return
    run_ids = tuple(memory.session_runs[f"{vehicle.vehicle_id}/{day}"])
    deeds.set_new_baseline(services, vehicle, memory, run_ids, "calibrated anew at half-worn tyres")
