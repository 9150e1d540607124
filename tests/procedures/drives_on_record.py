"""Drives of the independent stepped world, handed in as a vehicle and its driver would, onto a real record."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, field, replace
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from registry.domain.calibration import Calibration
from registry.domain.person import Actor
from registry.domain.run import ClosureStatement, Conditions, Run
from registry.domain.vehicle import Parameters, VehicleStatement
from registry.procedures import upkeep
from registry.procedures.adoption import adopt
from registry.procedures.baseline import propose_baseline
from registry.procedures.intake import RunStatement, content_digest, take_run
from registry.procedures.registration import put_vehicle
from registry.services import Services
from registry.storage.engine import Connection
from tests.conftest import BEGINNING, StandingClock, services_in
from tests.numerics.drives import Leg, Truth, calibration_session, drive, eight, half_loop, is_spin, straight, traverse

VEHICLE = "tub-9"
POSITION_SD_M, HEADING_SD_RAD = 0.005, float(np.radians(0.23))
#: (0.7 mm)^2 on a metre.
NOISE_M = 0.49e-6
TRUTH = Truth(3.512e-4, 3.497e-4, 0.868, NOISE_M)
#: The ruler's width is 40 % too small, as on tracks.
STATEMENT = VehicleStatement(
    name="Ore tub 9", drive="tracks", nominal=Parameters(3.5e-4, 3.5e-4, 0.62), max_speed_m_per_s=2.0
)
TECHNICIAN, APPROVER = Actor("person", "Tove", "technician"), Actor("person", "Abel", "approver")
#: What a vehicle drives on a working day: all of it together tells every quantity.
WORK: tuple[list[Leg], ...] = (
    half_loop(4.0, 1),
    traverse(4.0, 0.8, 5.0),
    half_loop(4.0, -1),
    straight(10.0),
    eight(1.2),
)


@dataclass(frozen=True)
class Reading:
    """How a driver reads the end: which components, and how far wrong (m) by mistake."""

    components: tuple[str, ...] = ("x", "y", "heading")
    wrong_m: float = 0.0
    counted: bool | None = None
    position_sd_m: float = POSITION_SD_M
    heading_sd_rad: float = HEADING_SD_RAD


POSE = Reading()


def readings_of(ticks: Any, start: int, bits: int) -> np.ndarray:
    """Counter readings (n + 1,) of increments (n,)."""
    total = np.concatenate([[0], np.cumsum(np.asarray(ticks, dtype=np.int64))]) + start
    return np.asarray(total % (1 << bits), dtype=np.int64)


def read_end(end: Any, rng: np.random.Generator, reading: Reading, counted: bool) -> ClosureStatement:
    """The closure of a true end (x, y, total turn), scattered as honestly as it is stated."""
    sd = np.array([reading.position_sd_m, reading.position_sd_m, reading.heading_sd_rad])
    x, y, total = (float(value) for value in np.asarray(end) + sd * rng.standard_normal(3))
    heading = float(-((-total + np.pi) % (2 * np.pi) - np.pi))
    turns = round((total - heading) / (2 * np.pi)) if counted else None
    named = {"x": x + reading.wrong_m, "y": y, "heading": heading, "distance": float(np.hypot(x, y))}
    x_m, y_m, heading_rad, distance_m = (
        named[name] if name in reading.components else None for name in ("x", "y", "heading", "distance")
    )
    place = any(value is not None for value in (x_m, y_m, distance_m))
    return ClosureStatement(
        x_m=x_m,
        y_m=y_m,
        heading_rad=heading_rad,
        distance_m=distance_m,
        turns=turns,
        position_sd_m=reading.position_sd_m if place else None,
        heading_sd_rad=reading.heading_sd_rad if heading_rad is not None else None,
    )


def statement_of(
    legs: Sequence[Leg],
    truth: Truth,
    rng: np.random.Generator,
    started_at: datetime,
    key: str,
    reading: Reading = POSE,
    bits: int = 32,
    start: int = 5000,
) -> RunStatement:
    """Drive in the stepped world and write down what the logger and the driver would hand in."""
    driven = drive(legs, truth, rng, rate_hz=10.0, steps_a_sample=8)
    left, right = (readings_of(ticks, start, bits) for ticks in driven.ticks)
    counted = is_spin(legs) if reading.counted is None else reading.counted
    closure = read_end(driven.end, rng, reading, counted)
    return sealed(
        RunStatement(
            run_key=key,
            started_at=started_at,
            time_s=np.arange(left.size) * 0.1,
            left_counts=left,
            right_counts=right,
            closure=closure,
            conditions=Conditions(course="yard", driven_by="Tove"),
            content_digest="",
        )
    )


def sealed(statement: RunStatement) -> RunStatement:
    """The statement with the digest of what it holds, as a door would make it."""
    body = {
        "run_key": statement.run_key,
        "started_at": statement.started_at.isoformat(),
        "time_s": statement.time_s.tolist(),
        "left_counts": statement.left_counts.tolist(),
        "right_counts": statement.right_counts.tolist(),
        "closure": {name: str(value) for name, value in vars(statement.closure).items()},
        "conditions": vars(statement.conditions),
    }
    return replace(statement, content_digest=content_digest(body))


@dataclass
class DrivenVehicle:
    """A vehicle on the register, its true values, and the people who drive it."""

    services: Services
    clock: StandingClock
    vehicle_id: str = VEHICLE
    truth: Truth = TRUTH
    rng: np.random.Generator = field(default_factory=lambda: np.random.default_rng(7))
    number: int = 0

    def state(self, legs: Sequence[Leg], reading: Reading = POSE, started_at: datetime | None = None) -> RunStatement:
        """A run that ended a little before the clock's time, unless another start is given."""
        self.number += 1
        key = f"{self.vehicle_id} run {self.number}"
        start = self.clock() - timedelta(minutes=8) if started_at is None else started_at
        return statement_of(legs, self.truth, self.rng, start, key, reading)

    def hand_in(self, legs: Sequence[Leg], reading: Reading = POSE, started_at: datetime | None = None) -> Run:
        run, _ = take_run(self.services, TECHNICIAN, self.vehicle_id, self.state(legs, reading, started_at))
        return run

    def session(self) -> list[Run]:
        """The twelve calibration runs, twenty minutes apart."""
        runs = []
        for legs in calibration_session():
            self.clock.move(minutes=20)
            runs.append(self.hand_in(legs))
        return runs

    def work(self, count: int, hours: float = 12.0) -> list[Run]:
        """Ordinary runs, some hours apart, going on in the round of what is driven."""
        runs = []
        for _ in range(count):
            self.clock.move(hours=hours)
            runs.append(self.hand_in(WORK[self.number % len(WORK)]))
        return runs

    def change(self, left: float = 0.0, right: float = 0.0, width: float = 0.0) -> None:
        """Let the vehicle itself change, relative to what it is."""
        old = self.truth
        self.truth = replace(
            old,
            left_m_per_tick=old.left_m_per_tick * (1 + left),
            right_m_per_tick=old.right_m_per_tick * (1 + right),
            width_m=old.width_m * (1 + width),
        )

    def baseline(self, run_ids: tuple[str, ...] | None = None) -> Calibration:
        return propose_baseline(self.services, TECHNICIAN, self.vehicle_id, run_ids, "after the session")

    def put_in_force(self, calibration: Calibration, reason: str = "the runs agree") -> Calibration:
        return adopt(self.services, APPROVER, calibration.calibration_id, reason)


def registered(services: Services, clock: StandingClock, vehicle_id: str = VEHICLE, seed: int = 7) -> DrivenVehicle:
    """A vehicle that is on the register and has not driven yet."""
    put_vehicle(services, APPROVER, vehicle_id, STATEMENT)
    return DrivenVehicle(services, clock, vehicle_id, rng=np.random.default_rng(seed))


@dataclass
class _NamedIds:
    """Identities unlike those that the tests' own services count."""

    word: str
    number: int = 0

    def __call__(self) -> str:
        self.number += 1
        return f"{self.word}{self.number:020d}"


def driven_database(migrated_file: Path, folder: Path) -> Path:
    """A database in which a vehicle has driven its calibration runs two days before every test begins."""
    shutil.copy(migrated_file, folder / "rollbook.db")
    clock = StandingClock(BEGINNING - timedelta(days=2))
    services = replace(services_in(folder, clock), new_id=_NamedIds("made"))
    registered(services, clock).session()
    upkeep.backup(services, folder / "driven.db")
    return folder / "driven.db"


def calibrated_database(driven_file: Path, folder: Path) -> Path:
    """The same with a baseline of those runs in force since a day before every test begins."""
    shutil.copy(driven_file, folder / "rollbook.db")
    clock = StandingClock(BEGINNING - timedelta(days=1))
    services = replace(services_in(folder, clock), new_id=_NamedIds("next"))
    vehicle = DrivenVehicle(services, clock)
    vehicle.put_in_force(vehicle.baseline())
    upkeep.backup(services, folder / "calibrated.db")
    return folder / "calibrated.db"


def meanwhile(services: Services, happens: Callable[[], object]) -> Services:
    """The same services, on which something happens between the reading of a procedure and its writing."""
    pending = [happens]

    def write() -> AbstractContextManager[Connection]:
        while pending:
            pending.pop()()
        return services.write()

    return replace(services, write=write)


def on_a_copy(file: Path, folder: Path, clock: StandingClock, **chosen: object) -> DrivenVehicle:
    """The vehicle of a database made before, on a copy of its own, with its runs numbered on."""
    folder.mkdir()
    shutil.copy(file, folder / "rollbook.db")
    return DrivenVehicle(services_in(folder, clock, **chosen), clock, number=12)
