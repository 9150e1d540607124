"""What all tests share: services on a file database, a standing clock, counting identities, an actor of every role."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from itertools import count
from pathlib import Path

import pytest

from registry.domain.calibration import Calibration, CalibrationResult, Observed
from registry.domain.person import Actor
from registry.domain.vehicle import Parameters, VehicleStatement, VehicleVersion
from registry.procedures import upkeep
from registry.procedures.adoption import adopt
from registry.procedures.registration import put_vehicle
from registry.services import Services, make_services
from registry.settings import Settings, sqlite_url
from registry.storage import calibrations

#: When every test begins: late enough for a past, and not a whole second.
BEGINNING = datetime(2026, 3, 2, 8, 30, 15, 250000, tzinfo=UTC)


@dataclass
class StandingClock:
    """A clock that stands until it is moved."""

    time: datetime = BEGINNING

    def __call__(self) -> datetime:
        return self.time

    def move(self, **by: float) -> datetime:
        """Move on by days, hours, minutes, seconds and answer the new time."""
        self.time += timedelta(**by)
        return self.time


@dataclass
class CountingIds:
    """Identities that count, so that a test can name them."""

    numbers: count[int] = field(default_factory=lambda: count(1))

    def __call__(self) -> str:
        return f"id{next(self.numbers):022d}"


@pytest.fixture
def clock() -> StandingClock:
    return StandingClock()


def services_in(folder: Path, clock: Callable[[], datetime], **chosen: object) -> Services:
    """Services on the database in a folder, which need not be there yet."""
    settings = Settings(home=folder, database_url=sqlite_url(folder), secret_key="a standing secret")
    made = make_services(replace(settings, **chosen))  # type: ignore[arg-type]  # a test names the fields it wants
    return replace(made, now=clock, new_id=CountingIds())


@pytest.fixture(scope="session")
def migrated_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An empty database at head, made once and copied for each test."""
    folder = tmp_path_factory.mktemp("migrated")
    services = services_in(folder, StandingClock())
    upkeep.migrate(services)
    services.close()
    return folder / "rollbook.db"


@pytest.fixture
def make_home(tmp_path: Path, migrated_file: Path, clock: StandingClock) -> Iterator[Callable[..., Services]]:
    """Makes services on a fresh migrated database; settings may be chosen by name."""
    made: list[Services] = []

    def make(**chosen: object) -> Services:
        folder = tmp_path / "home"
        folder.mkdir()
        shutil.copy(migrated_file, folder / "rollbook.db")
        made.append(services_in(folder, clock, **chosen))
        return made[-1]

    yield make
    for one in made:
        one.close()


@pytest.fixture
def services(make_home: Callable[..., Services]) -> Services:
    return make_home()


@pytest.fixture
def reader() -> Actor:
    return Actor("person", "Rea", "reader")


@pytest.fixture
def technician() -> Actor:
    return Actor("person", "Tove", "technician")


@pytest.fixture
def approver() -> Actor:
    return Actor("person", "Abel", "approver")


@pytest.fixture
def keeper() -> Actor:
    return Actor("person", "Kim", "keeper")


@pytest.fixture
def local() -> Actor:
    return Actor("local", "console")


@pytest.fixture
def statement() -> VehicleStatement:
    return VehicleStatement(
        name="Ore tub 7",
        drive="tracks",
        nominal=Parameters(0.000349, 0.000349, 0.150),
        max_speed_m_per_s=1.5,
        site="North drift",
        serial="OT-0007",
    )


@pytest.fixture
def vehicle(services: Services, approver: Actor, statement: VehicleStatement) -> VehicleVersion:
    """A vehicle on the register, ``tub-7``."""
    version, _created = put_vehicle(services, approver, "tub-7", statement)
    return version


@dataclass
class Proposer:
    """Puts calibrations on the record and into force, with values that a test can tell apart."""

    services: Services
    clock: StandingClock
    approver: Actor

    def result(self, left_mm: float = 0.3477, right_mm: float = 0.3479, width_mm: float = 620.5) -> CalibrationResult:
        return CalibrationResult(
            kind="entered",
            parameters=Parameters(left_mm / 1000.0, right_mm / 1000.0, width_mm / 1000.0),
            covariance_relative=((4e-8, 1e-8, 0.0), (1e-8, 4e-8, 0.0), (0.0, 0.0, 2.5e-7)),
            observed=Observed(tick_factor=True, side_ratio=True, width=True),
            method_version="entered",
        )

    def propose(self, vehicle_id: str = "tub-7", result: CalibrationResult | None = None) -> Calibration:
        with self.services.write() as c:
            holds = calibrations.in_force(c, vehicle_id)
            return calibrations.add(
                c,
                self.services.new_id(),
                vehicle_id,
                result or self.result(),
                None if holds is None else holds.calibration_id,
                self.clock(),
                "Tove",
            )

    def adopt(self, vehicle_id: str = "tub-7", result: CalibrationResult | None = None) -> Calibration:
        proposed = self.propose(vehicle_id, result)
        return adopt(self.services, self.approver, proposed.calibration_id, "runs of the week agree")


@pytest.fixture
def proposer(services: Services, clock: StandingClock, approver: Actor, vehicle: VehicleVersion) -> Proposer:
    return Proposer(services, clock, approver)
