"""The boot client and the registry as they are installed: two programs that share a socket and nothing else."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import timedelta
from itertools import count
from pathlib import Path

import pytest

from registry.domain.boot import Boot
from registry.domain.calibration import Calibration, Kind
from registry.domain.person import Actor
from registry.domain.tolerance import Tolerance
from registry.domain.vehicle import Parameters, VehicleStatement
from registry.procedures import adoption, boot, people, upkeep
from registry.procedures.baseline import propose_entered
from registry.procedures.maintenance import record_maintenance
from registry.procedures.registration import put_vehicle
from registry.services import Services, make_services
from registry.settings import Settings
from registry.storage import alerts, boots
from tests.vehicle.conftest import Vehicle, said

_APPROVER = Actor("person", "Abel", "approver")
_KEEPER = Actor("person", "Kim", "keeper")
_NUMBERS = count(1)


@dataclass
class Registry:
    """A served home and the services to act on it as a person would."""

    services: Services
    url: str

    def vehicle(self, folder: Path) -> Registered:
        vehicle_id = f"AGV-{next(_NUMBERS)}"
        nominal = Parameters(0.3477e-3, 0.3477e-3, 0.620)
        statement = VehicleStatement("Tug", "wheels", nominal, 2.0, tolerance=Tolerance())
        put_vehicle(self.services, _APPROVER, vehicle_id, statement)
        key = people.issue_key(self.services, _KEEPER, vehicle_id=vehicle_id)
        folder.mkdir(exist_ok=True)
        return Registered(self, Vehicle(folder, vehicle_id), key)


@dataclass
class Registered:
    """A vehicle on the register, with its own key and boot client."""

    registry: Registry
    vehicle: Vehicle
    key: str

    def boot(self, *more: str, url: str | None = None) -> subprocess.CompletedProcess[bytes]:
        return self.vehicle.boot(url or self.registry.url, "--timeout", "30", *more, key=self.key)

    def adopt(self, kind: Kind = "entered", width_m: float = 0.6205) -> Calibration:
        values = Parameters(0.34771e-3, 0.34789e-3, width_m)
        proposed = propose_entered(
            self.registry.services, _APPROVER, self.vehicle.vehicle_id, kind, values, (1e-8, 1e-8, 4e-4), None
        )
        return adoption.adopt(self.registry.services, _APPROVER, proposed.calibration_id, "measured")

    def reported(self) -> list[Boot]:
        with self.registry.services.read() as c:
            return sorted(boots.all_for(c, self.vehicle.vehicle_id), key=lambda seen: seen.booted_at)


@pytest.fixture(scope="module")
def registry(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Registry]:
    home = tmp_path_factory.mktemp("served")
    services = make_services(Settings.from_environment(home))
    upkeep.migrate(services)
    command = [sys.executable, "-m", "registry", "serve", "--home", str(home), "--port", "0", "--no-schedule", "--json"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as serving:
        assert serving.stdout is not None
        assert serving.stderr is not None
        document = ""
        while not document.endswith("}\n"):
            line = serving.stdout.readline()
            assert line, serving.stderr.read()
            document += line
        try:
            yield Registry(services, json.loads(document)["address"])
        finally:
            serving.send_signal(signal.SIGTERM)
            _, complaints = serving.communicate(timeout=60)
        assert serving.returncode == 0, complaints
        assert "Traceback" not in complaints


@pytest.fixture
def tug(registry: Registry, tmp_path: Path) -> Registered:
    return registry.vehicle(tmp_path / "tug")


def test_a_vehicle_loads_what_is_in_force_and_its_boot_is_on_the_record(tug: Registered) -> None:
    calibration = tug.adopt()
    first, second = tug.boot("--software", "drive 4.2"), tug.boot()
    assert (first.returncode, second.returncode) == (0, 0), said(first) + said(second)
    assert first.stdout == second.stdout
    fields = dict(line.split("=", 1) for line in first.stdout.decode().splitlines())
    assert (fields["LEFT_MM_PER_TICK"], fields["WIDTH_MM"], fields["CONDITION"]) == ("0.34771", "620.5", "good")
    assert fields["COUNTING_BITS"] == "32"
    kept = json.loads(json.loads((tug.vehicle.state / "state.json").read_text())["content"])
    assert kept["etag"]
    reported = tug.reported()
    assert [(seen.calibration_id, seen.matched, seen.statement.source) for seen in reported] == [
        (calibration.calibration_id, True, "fetched")
    ] * 2
    assert reported[0].statement.software == "drive 4.2"


def test_provisional_and_questioned_parameters_say_so(tug: Registered) -> None:
    tug.adopt("provisional")
    done = tug.boot()
    assert done.returncode == 11
    assert "which is provisional" in said(done)
    services = tug.registry.services
    record_maintenance(services, _APPROVER, tug.vehicle.vehicle_id, services.now(), "part_fitted", "left", None)
    done = tug.boot()
    assert done.returncode == 10
    assert "new track, tyre or wheel fitted" in said(done)
    assert tug.boot(url="http://127.0.0.1:9").returncode == 20


def test_nothing_in_force_and_withdrawn_stand_still_even_without_network(tug: Registered) -> None:
    assert tug.boot().returncode == 30
    calibration = tug.adopt()
    assert tug.boot().returncode == 0
    adoption.withdraw(
        tug.registry.services, _APPROVER, calibration.calibration_id, "a mark was read wrongly", "nothing"
    )
    done = tug.boot()
    assert (done.returncode, done.stdout) == (30, b"")
    assert f"(withdrawn: {calibration.number})" in said(done)
    assert tug.boot(url="http://127.0.0.1:9").returncode == 30
    tug.adopt(width_m=0.62)
    assert tug.boot().returncode == 0


def test_a_reinstated_calibration_is_a_new_number(tug: Registered) -> None:
    old = tug.adopt()
    assert tug.boot().returncode == 0
    bad = tug.adopt(width_m=0.66)
    assert tug.boot().returncode == 0
    adoption.withdraw(tug.registry.services, _APPROVER, bad.calibration_id, "wrong width", "reinstate", old.number)
    done = tug.boot()
    assert done.returncode == 0
    assert b"\nWIDTH_MM=620.5\n" in done.stdout
    assert "calibration 3 " in said(done)


def test_boots_from_the_kept_copy_reach_the_record_with_their_age(tug: Registered) -> None:
    tug.adopt()
    tug.boot()
    for _ in range(2):
        assert tug.boot(url="http://127.0.0.1:9").returncode == 20
    assert len(tug.reported()) == 1
    assert tug.boot().returncode == 0
    kept = [seen for seen in tug.reported() if seen.statement.source == "kept"]
    assert len(kept) == 2
    assert all(seen.matched and seen.statement.age_s is not None for seen in kept)


def test_a_carried_file_loads_on_its_own_vehicle_and_on_no_other(registry: Registry, tmp_path: Path) -> None:
    tug, other = registry.vehicle(tmp_path / "tug"), registry.vehicle(tmp_path / "other")
    tug.adopt()
    command = [sys.executable, "-m", "registry", "parameters", tug.vehicle.vehicle_id]
    command += ["--home", str(registry.services.settings.home)]
    carried = subprocess.run(command, capture_output=True, check=True).stdout
    path = tug.vehicle.write("carried", carried)
    done = tug.boot("--carried", path, url="http://127.0.0.1:9")
    assert (done.returncode, done.stdout) == (20, carried)
    done = other.boot("--carried", path, url="http://127.0.0.1:9")
    assert (done.returncode, done.stdout) == (40, b"")
    assert f"for vehicle {tug.vehicle.vehicle_id}, not {other.vehicle.vehicle_id}" in said(done)
    assert tug.boot().returncode == 0
    assert {seen.statement.source for seen in tug.reported()} == {"carried", "fetched"}


def test_another_vehicles_key_and_no_valid_key_are_refused(registry: Registry, tmp_path: Path) -> None:
    tug, other = registry.vehicle(tmp_path / "tug"), registry.vehicle(tmp_path / "other")
    tug.adopt()
    for key, status in ((other.key, 403), ("no-key-of-ours", 401)):
        tug.key = key
        done = tug.boot()
        assert (done.returncode, done.stdout) == (40, b"")
        assert f"refuses this vehicle's key (status {status})" in said(done)


def test_a_vehicle_that_is_not_on_the_register_is_refused(registry: Registry, tmp_path: Path) -> None:
    tug = registry.vehicle(tmp_path / "tug")
    tug.key = people.issue_key(registry.services, _KEEPER, person=_keeper(registry))
    tug.vehicle.vehicle_id = "nobody-7"
    done = tug.boot()
    assert done.returncode == 40
    assert "nobody-7" in said(done)


def _keeper(registry: Registry) -> str:
    return people.add_person(registry.services, _KEEPER, "Kim", "keeper", "a long password").name


def test_a_vehicle_that_boots_on_superseded_parameters_raises_an_alert(registry: Registry, tmp_path: Path) -> None:
    now = registry.services.now()
    past = [replace(registry.services, now=lambda days=days: now - timedelta(days=days)) for days in (5, 3)]
    tug = Registry(past[0], registry.url).vehicle(tmp_path / "tug")
    tug.adopt()
    old = tug.vehicle.write("old", boot.parameters_file(past[0], _KEEPER, tug.vehicle.vehicle_id))
    replace(tug, registry=Registry(past[1], registry.url)).adopt(width_m=0.66)
    assert tug.boot("--carried", old, url="http://127.0.0.1:9").returncode == 20
    assert tug.boot().returncode == 0
    with registry.services.read() as c:
        raised = alerts.page(c, "all", tug.vehicle.vehicle_id, 10, None).items
    assert [alert.content.kind for alert in raised] == ["boot_mismatch"]
    assert [seen.matched for seen in tug.reported()] == [False, True]
