"""A vehicle that drives, on the register or already calibrated, for every test of the procedures."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from registry.services import Services
from tests.conftest import StandingClock
from tests.procedures.drives_on_record import (
    DrivenVehicle,
    calibrated_database,
    driven_database,
    on_a_copy,
    registered,
)


@pytest.fixture
def driven(services: Services, clock: StandingClock) -> DrivenVehicle:
    """A vehicle on the register that has not driven yet."""
    return registered(services, clock)


@pytest.fixture(scope="session")
def driven_file(migrated_file: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return driven_database(migrated_file, tmp_path_factory.mktemp("driven"))


@pytest.fixture(scope="session")
def calibrated_file(driven_file: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return calibrated_database(driven_file, tmp_path_factory.mktemp("calibrated"))


@pytest.fixture
def after_session(tmp_path: Path, driven_file: Path, clock: StandingClock) -> DrivenVehicle:
    """A vehicle that drove its calibration runs two days ago and has nothing in force."""
    return on_a_copy(driven_file, tmp_path / "driven", clock)


@pytest.fixture
def make_calibrated(tmp_path: Path, calibrated_file: Path, clock: StandingClock) -> Callable[..., DrivenVehicle]:
    """Makes a vehicle with a baseline in force since yesterday; settings may be chosen by name."""
    return lambda **chosen: on_a_copy(calibrated_file, tmp_path / "calibrated", clock, **chosen)


@pytest.fixture
def calibrated(make_calibrated: Callable[..., DrivenVehicle]) -> DrivenVehicle:
    return make_calibrated()
