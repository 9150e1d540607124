"""An application on a file database that holds people, two vehicles and a key of each of them."""

from __future__ import annotations

import shutil
from dataclasses import dataclass, replace
from itertools import count
from pathlib import Path
from typing import Any

import pytest
from flask import Flask

from registry.api.vehicles import VehicleBody
from registry.app import create_app
from registry.domain.person import Actor
from registry.procedures import people, upkeep
from registry.procedures.registration import put_vehicle
from registry.services import Services
from tests.conftest import StandingClock, services_in

from .calling import ENTERED, ROLES, VEHICLE, Caller, record_runs


@dataclass(frozen=True)
class Home:
    """A folder with a migrated database that holds people and two vehicles, and a key of each of them."""

    folder: Path
    keys: dict[str, str]


@pytest.fixture(scope="session")
def first_home(tmp_path_factory) -> Home:
    folder = tmp_path_factory.mktemp("home")
    services, local, keys = services_in(folder, StandingClock()), Actor("local", "here"), {}
    upkeep.migrate(services)
    for role in ROLES:
        people.add_person(services, local, role, role, "a long password")
        keys[role] = people.issue_key(services, local, person=role)
    for vehicle_id in ("LC-07", "LC-08"):
        put_vehicle(services, local, vehicle_id, VehicleBody.model_validate(VEHICLE).statement())
        keys[vehicle_id] = people.issue_key(services, local, vehicle_id=vehicle_id)
    upkeep.backup(services, folder / "copied.db")
    return Home(folder, keys)


@pytest.fixture
def services(first_home, tmp_path, clock) -> Services:
    shutil.copy(first_home.folder / "copied.db", tmp_path / "rollbook.db")
    numbers = count(1000)
    return replace(services_in(tmp_path, clock), new_id=lambda: f"id{next(numbers):022d}")


@pytest.fixture
def app(services) -> Flask:
    return create_app(services)


@pytest.fixture(scope="session")
def document(first_home) -> dict[str, Any]:
    client = create_app(services_in(first_home.folder, StandingClock())).test_client()
    return client.get("/api/v1/openapi.json").get_json()


@pytest.fixture
def call(app, first_home, document) -> Caller:
    return Caller(app, document, dict(first_home.keys))


@pytest.fixture
def calibration_runs(call, clock) -> list[dict[str, Any]]:
    """Runs of LC-07 that determine every quantity, driven in the hours before now."""
    return record_runs(call, clock.time)


@pytest.fixture
def in_force(call) -> dict[str, Any]:
    """Entered values in force for LC-07."""
    proposed = call.ok("POST", "/vehicles/LC-07/calibrations", body=ENTERED)
    path = f"/calibrations/{proposed['calibration_id']}/adoption"
    return call.ok("POST", path, body={"reason": "first values"})
