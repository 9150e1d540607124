"""Which runs each vehicle drives on which day, and what comes of one: a log, and an end as read with tape and bob."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from math import hypot, pi, radians
from typing import Literal

import numpy as np

from registry.domain.run import ClosureStatement, Conditions
from seed_demo.courses import Course, Sense, figure_of_eight, half_loop, spin, square, straight, traverse
from seed_demo.fleet import Fault, Vehicle
from seed_demo.simulator import FloatArray, IntArray, Log, Logger, Slip, log, mark_end, move

#: What tape and protractor are good for, as the drivers state it and as the world scatters their readings.
POSITION_SD_M = 0.005
HEADING_SD_RAD = radians(0.25)
_TWENTIETH_RAD = radians(0.05)

Reading = Literal["pose", "point", "distance", "turns"]

_MARKS = {"straight": "C", "traverse": "E", "half loop": "B"}
_DRIVERS = ("Jonna", "Tarek", "Beni")


@dataclass(frozen=True)
class RunPlan:
    """One run to drive: everything that its simulation needs, and nothing of the program's."""

    vehicle: Vehicle
    run_key: str
    day: int
    second_of_day: int
    share: float
    course: Course
    reading: Reading
    driver: str
    seed: tuple[int, int, int]
    slip: Slip | None = None
    fault: Fault | None = None

    def conditions(self) -> Conditions:
        """What the driver notes."""
        kind = next((word for word in _MARKS if self.course.name.startswith(word)), None)
        return Conditions(
            start_mark="A",
            end_mark=_MARKS[kind] if kind else "A",
            course=self.course.name,
            surface="concrete slab",
            driven_by=self.driver,
            read_by=_DRIVERS[(_DRIVERS.index(self.driver) + 1) % len(_DRIVERS)],
            instrument="plumb bob" if self.reading == "turns" else "tape 4",
        )


@dataclass(frozen=True)
class DrivenRun:
    """What the vehicle and its driver hand in."""

    plan: RunPlan
    time_s: FloatArray
    left_counts: IntArray
    right_counts: IntArray
    closure: ClosureStatement


def sister_of(vehicle: Vehicle, fleet: tuple[Vehicle, ...]) -> Vehicle | None:
    """Another vehicle of the same make, whose values a newcomer may borrow."""
    return next((other for other in fleet if other.make == vehicle.make and other is not vehicle), None)


def session_days(vehicle: Vehicle, days: int) -> list[int]:
    """Days of the twelve calibration runs. First sessions are spread, three vehicles a day."""
    return [vehicle.place // 3 if share == 0.0 else round(share * days) for share in vehicle.story.sessions]


def arrival_day(vehicle: Vehicle, days: int) -> int:
    """Day on which the vehicle is registered."""
    return vehicle.place // 3 if vehicle.story.arrives == 0.0 else round(vehicle.story.arrives * days)


def last_run_day(vehicle: Vehicle, days: int) -> int:
    """Day of the last run. A vehicle laid up has been silent for longer than the time after which that is an alert."""
    return days if vehicle.story.last_run >= 1.0 else min(round(vehicle.story.last_run * days), days - 38)


def is_measuring_day(vehicle: Vehicle, day: int) -> bool:
    """Each vehicle has its day of the week on the slab."""
    return (day + 2 * vehicle.place) % 7 == 0


def plans(vehicle: Vehicle, days: int) -> Iterator[RunPlan]:
    """All runs of one vehicle in order of time: its calibration sessions, and three runs on a day of each week."""
    rng = np.random.default_rng([vehicle.seed, 1])
    sessions = session_days(vehicle, days)
    first = arrival_day(vehicle, days)
    last = last_run_day(vehicle, days)
    for day in range(first, days + 1):
        if day in sessions:
            yield from _session(vehicle, day, days, rng)
        elif first < day <= last:
            yield from _ordinary(vehicle, day, days, rng)


def _session(vehicle: Vehicle, day: int, days: int, rng: np.random.Generator) -> Iterator[RunPlan]:
    make = vehicle.make
    senses: tuple[Sense, ...] = (1, -1, 1, -1)
    courses: list[tuple[Course, Reading]] = [
        *((straight(_about(make.straight_m, rng), _weave(rng)), "pose") for _ in range(3)),
        *((_half_loop(vehicle, sense, rng), "pose") for sense in senses),
        (spin(4, 1), "turns"),
        (spin(4, -1), "turns"),
        *((_traverse(vehicle, rng), "pose") for _ in range(3)),
    ]
    driver = str(rng.choice(_DRIVERS))
    for number, (course, reading) in enumerate(courses):
        second = 8 * 3600 + 1500 * number + int(rng.integers(0, 400))
        yield _plan(vehicle, day, days, second, course, reading, driver, number)


def _ordinary(vehicle: Vehicle, day: int, days: int, rng: np.random.Generator) -> Iterator[RunPlan]:
    if not is_measuring_day(vehicle, day):
        return
    for number in range(3):
        course, reading = _pick(vehicle, day + number, rng)
        driver = str(rng.choice(_DRIVERS))
        second = 8 * 3600 + 7200 * number + int(rng.integers(0, 5400))
        yield _plan(vehicle, day, days, second, course, reading, driver, number)


def _pick(vehicle: Vehicle, turn: int, rng: np.random.Generator) -> tuple[Course, Reading]:
    sense: Sense = 1 if turn % 2 == 0 else -1
    make = vehicle.make
    if vehicle.story.diet == "squares":
        return square(make.straight_m / 4, sense, _weave(rng)), "pose"
    draw = rng.random()
    if draw < 0.45:
        return _half_loop(vehicle, sense, rng), "pose" if rng.random() < 0.9 else "point"
    if draw < 0.70:
        return _traverse(vehicle, rng), "pose"
    if draw < 0.87:
        return straight(_about(make.straight_m, rng), _weave(rng)), "pose" if rng.random() < 0.7 else "distance"
    if draw < 0.95:
        return figure_of_eight(make.radius_m), "pose"
    return spin(4, sense), "turns"


def _about(length_m: float, rng: np.random.Generator) -> float:
    return length_m * float(1.0 + rng.normal(0.0, 0.004))


def _weave(rng: np.random.Generator) -> float:
    return float(rng.normal(0.0, 0.02))


def _half_loop(vehicle: Vehicle, sense: Sense, rng: np.random.Generator) -> Course:
    make = vehicle.make
    return half_loop(_about(0.4 * make.straight_m, rng), _about(make.radius_m, rng), sense, _weave(rng))


def _traverse(vehicle: Vehicle, rng: np.random.Generator) -> Course:
    return traverse(_about(vehicle.make.straight_m, rng), 0.6 if rng.random() < 0.5 else -0.6, _weave(rng))


def _plan(
    vehicle: Vehicle, day: int, days: int, second: int, course: Course, reading: Reading, driver: str, number: int
) -> RunPlan:
    return RunPlan(
        vehicle=vehicle,
        run_key=f"{vehicle.vehicle_id}-d{day:03d}-{number + 1:02d}",
        day=day,
        second_of_day=second,
        share=(day + second / 86400) / days,
        course=course,
        reading=reading,
        driver=driver,
        seed=(vehicle.seed, 2 + day, number),
    )


def with_mishaps(planned: list[RunPlan]) -> list[RunPlan]:
    """Let the slips and faults of the story befall the first ordinary run at or after their moment."""
    if not planned:
        return planned
    story = planned[0].vehicle.story
    found = list(planned)
    for share in story.slips:
        index = _first_after(found, share)
        side: Literal["left", "right"] = "left" if index % 2 else "right"
        found[index] = replace(found[index], slip=Slip(0.55, side, 0.06))
    for share, fault in story.faults:
        index = _first_after(found, share)
        found[index] = replace(found[index], fault=fault)
    return found


def _first_after(planned: list[RunPlan], share: float) -> int:
    return next((i for i, plan in enumerate(planned) if plan.share >= share), len(planned) - 1)


def drive(plan: RunPlan) -> DrivenRun:
    """Simulate one run. Depends on the plan alone: the same plan gives the same log, in any process and order."""
    rng = np.random.default_rng(plan.seed)
    make = plan.vehicle.make
    truth = plan.vehicle.truth(plan.share)
    scale, ratio, width = rng.normal(0.0, (make.scale_spread, make.ratio_spread, make.width_spread))
    today = replace(
        truth,
        left_m_per_tick=truth.left_m_per_tick * (1.0 + scale - ratio / 2),
        right_m_per_tick=truth.right_m_per_tick * (1.0 + scale + ratio / 2),
        width_m=truth.width_m * (1.0 + width),
    )
    motion = move(plan.course, today, make.measuring_speed_m_per_s, rng, (plan.slip,) if plan.slip else ())
    written = log(motion, Logger(make.log_rate_hz, make.lateness_steps, plan.vehicle.counter_bits), rng)
    if plan.fault:
        written = _garbled(written, plan.fault, rng)
    closure = read_end(mark_end(motion, today), plan.reading, rng)
    return DrivenRun(plan, written.time_s, written.left_counts, written.right_counts, closure)


def _garbled(written: Log, fault: Fault, rng: np.random.Generator) -> Log:
    """A logger's faults: samples of nonsense, a counter that starts again from zero, counters that stand still."""
    left, right = written.left_counts.copy(), written.right_counts.copy()
    middle = left.size // 2
    if fault == "spike":
        for index in rng.choice(np.arange(left.size // 4, 3 * left.size // 4), 3, replace=False):
            left[index] = (left[index] + 250_000) % (1 << 32)
    elif fault == "reset":
        left[middle:] -= left[middle]
        right[middle:] -= right[middle]
        left, right = left % (1 << 32), right % (1 << 32)
    else:
        left[:], right[:] = left[0], right[0]
    return Log(written.time_s, left, right)


def read_end(
    end: tuple[float, float, float],
    reading: Reading,
    rng: np.random.Generator,
    position_sd_m: float = POSITION_SD_M,
    heading_sd_rad: float = HEADING_SD_RAD,
) -> ClosureStatement:
    """Read the end of a run as a person would: to the millimetre and a twentieth of a degree, with honest scatter.

    Parameters
    ----------
    end : tuple of float
        True x (m), y (m) and total turn (rad) of the measured mark.
    reading : str
        ``pose``: x, y, heading; ``point``: x, y; ``distance``: straight distance; ``turns``: heading and whole turns.
    rng : numpy.random.Generator
        Source of the reading errors.
    position_sd_m, heading_sd_rad : float
        Standard uncertainties, stated and true.
    """
    x, y = (float(v) for v in np.array(end[:2]) + rng.normal(0.0, position_sd_m, 2))
    total = end[2] + float(rng.normal(0.0, heading_sd_rad))
    turns, heading = _turns_and_heading(total)
    if reading == "turns":
        return ClosureStatement(None, None, heading, None, turns, None, heading_sd_rad)
    if reading == "distance":
        return ClosureStatement(None, None, None, round(hypot(x, y), 3), None, position_sd_m, None)
    pose = reading == "pose"
    return ClosureStatement(
        round(x, 3), round(y, 3), heading if pose else None, None, None, position_sd_m, heading_sd_rad if pose else None
    )


def _turns_and_heading(total_rad: float) -> tuple[int, float]:
    """Whole turns and the rest in (-pi, pi], of a total turn read to a twentieth of a degree."""
    twentieths = round(total_rad / _TWENTIETH_RAD)
    turns = -((3600 - twentieths) // 7200)
    return turns, min(pi, (twentieths - 7200 * turns) * _TWENTIETH_RAD)
