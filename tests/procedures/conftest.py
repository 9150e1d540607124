"""A vehicle that drives, on the register or already calibrated, for every test of the procedures."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from registry.services import Services
from tests.conftest import StandingClock, services_in
from tests.procedures.drives_on_record import DrivenVehicle, calibrated_database, registered


@pytest.fixture
def driven(services: Services, clock: StandingClock) -> DrivenVehicle:
    """A vehicle on the register that has not driven yet."""
    return registered(services, clock)


@pytest.fixture(scope="session")
def calibrated_file(migrated_file: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return calibrated_database(migrated_file, tmp_path_factory.mktemp("calibrated"))


@pytest.fixture
def make_calibrated(tmp_path: Path, calibrated_file: Path, clock: StandingClock) -> Callable[..., DrivenVehicle]:
    """Makes a vehicle with a baseline in force since yesterday; settings may be chosen by name."""

    def make(**chosen: object) -> DrivenVehicle:
        folder = tmp_path / "calibrated"
        folder.mkdir()
        shutil.copy(calibrated_file, folder / "rollbook.db")
        return DrivenVehicle(services_in(folder, clock, **chosen), clock, number=12)

    return make


@pytest.fixture
def calibrated(make_calibrated: Callable[..., DrivenVehicle]) -> DrivenVehicle:
    return make_calibrated()
