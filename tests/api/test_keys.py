"""Every door wants a valid key and refuses what the key may not do."""

import re
from datetime import timedelta

import pytest

from registry.api.keys import WrongKeys
from registry.procedures import people

from .calling import ENTERED, ROLES, VEHICLE, run

#: Every door: method, path, body, least role, whether a vehicle may use it for itself.
DOORS = [
    ("PUT", "/vehicles/LC-07", VEHICLE, "approver", False),
    ("GET", "/vehicles", None, "reader", False),
    ("GET", "/vehicles/LC-07", None, "reader", False),
    ("POST", "/vehicles/LC-07/runs", "a run", "technician", True),
    ("GET", "/vehicles/LC-07/runs", None, "reader", False),
    ("GET", "/runs/none", None, "reader", False),
    ("POST", "/runs/none/set-aside", {"reason": "slipped"}, "technician", False),
    ("POST", "/runs/none/restoration", {"reason": "it did not"}, "approver", False),
    ("POST", "/vehicles/LC-07/calibrations", ENTERED, "technician", False),
    ("GET", "/vehicles/LC-07/calibrations", None, "reader", False),
    ("GET", "/calibrations/none", None, "reader", False),
    ("POST", "/calibrations/none/adoption", {"reason": "good"}, "approver", False),
    ("POST", "/calibrations/none/withdrawal", {"reason": "bad", "then": "nothing"}, "approver", False),
    ("GET", "/vehicles/LC-07/parameters", None, "reader", True),
    ("GET", "/vehicles/LC-07/parameters?at=2026-01-01T00:00:00Z", None, "reader", True),
    ("POST", "/vehicles/LC-07/boots", {"calibration_number": 1}, "technician", True),
    ("POST", "/vehicles/LC-07/maintenance", {"done_at": "2026-02-01T08:00:00Z", "kind": "towed"}, "technician", False),
    ("GET", "/vehicles/LC-07/maintenance", None, "reader", False),
    ("GET", "/vehicles/LC-07/evaluations", None, "reader", False),
    ("GET", "/alerts", None, "reader", False),
    ("POST", "/alerts/none/acknowledgement", {"note": None}, "technician", False),
    ("GET", "/journal", None, "reader", False),
]
BY_PATH = pytest.mark.parametrize(("method", "path", "body", "role", "own"), DOORS, ids=lambda value: str(value)[:40])


def prepared(body, clock):
    return run("straight-a", clock.time - timedelta(hours=1)) if body == "a run" else body


def test_the_table_of_doors_is_complete(call):
    listed = {(method, re.sub(r"\?.*", "", path)) for method, path, *_ in DOORS}
    described = {
        (method.upper(), re.sub(r"\{vehicle_id\}", "LC-07", re.sub(r"\{(run|calibration|alert)_id\}", "none", path)))
        for path, item in call.document["paths"].items()
        for method in item
    }
    assert {(method, f"/api/v1{path}") for method, path in listed} == described


@BY_PATH
def test_without_a_key_every_door_answers_401(call, clock, method, path, body, role, own):
    response = call(method, path, None, prepared(body, clock))
    assert response.status_code == 401
    assert response.headers["WWW-Authenticate"].startswith("Bearer")
    assert response.get_json()["type"] == "/problems/no-valid-key"


@BY_PATH
def test_with_a_key_that_was_never_issued_every_door_answers_401(call, clock, method, path, body, role, own):
    call.keys["stranger"] = "x" * 43
    call.problem(401, method, path, "stranger", prepared(body, clock))


@BY_PATH
def test_without_a_key_nothing_is_said_of_the_query(call, clock, method, path, body, role, own):
    path = re.sub(r"\?.*", "", path)
    call.problem(401, method, f"{path}?at=now&colour=red", None, prepared(body, clock))


@pytest.mark.parametrize("header", ["", "Bearer", "Bearer ", "Basic a2V5", "key", "bearer\tkey"])
def test_a_header_that_carries_no_key_is_401(call, header):
    call.problem(401, "GET", "/vehicles", None, headers={"Authorization": header})


@BY_PATH
def test_a_person_needs_the_role_of_the_door_or_one_above_it(call, clock, method, path, body, role, own):
    for who in ROLES:
        answered = call(method, path, who, prepared(body, clock)).status_code
        if ROLES.index(who) < ROLES.index(role):
            assert answered == 403, who
        else:
            assert answered not in (401, 403), who


@BY_PATH
def test_a_vehicles_key_opens_its_own_doors_and_nothing_else(call, clock, method, path, body, role, own):
    assert (call(method, path, "LC-07", prepared(body, clock)).status_code != 403) is own
    call.problem(403, method, path, "LC-08", prepared(body, clock))


def test_the_refusal_of_a_role_comes_before_the_body_is_read(call):
    call.problem(403, "POST", "/vehicles/LC-07/calibrations", "reader", b"{" * 1000)
    call.problem(401, "POST", "/vehicles/LC-07/calibrations", None, b"{" * 1000)


def test_a_key_works_whatever_the_case_of_its_scheme(call):
    call.ok("GET", "/vehicles", None, headers={"Authorization": f"bearer {call.keys['reader']}"})


def test_wrong_keys_are_slowed_down_and_valid_ones_are_not(call, clock):
    call.keys["stranger"] = "guess"
    for _ in range(20):
        call.problem(401, "GET", "/vehicles", "stranger")
    refused = call("GET", "/vehicles", "stranger")
    assert refused.status_code == 429
    assert refused.get_json()["type"] == "/problems/too-many-requests"
    assert "Retry-After" in refused.headers
    assert refused.headers["X-Content-Type-Options"] == "nosniff"
    call.problem(429, "GET", "/vehicles/LC-07/parameters", "stranger")
    for _ in range(50):
        assert call("GET", "/vehicles", "reader").status_code == 200
    call.problem(401, "GET", "/vehicles", None)
    clock.move(minutes=1)
    call.problem(401, "GET", "/vehicles", "stranger")


def test_the_count_of_wrong_keys_forgets_addresses_of_the_past(clock):
    counted = WrongKeys()
    for address in range(10_001):
        counted.count(str(address), clock.time)
    clock.move(minutes=2)
    counted.count("another", clock.time)
    assert len(counted._since) == 1


def test_a_revoked_key_is_no_key(call, services):
    with services.write() as c:
        c.exec_driver_sql("UPDATE keys SET revoked_at = recorded_at WHERE person = 'reader'")
    call.problem(401, "GET", "/vehicles", "reader")
    call.problem(401, "GET", "/vehicles/LC-07/parameters", "reader")
    assert people.actor_for_key(services, call.keys["reader"]) is None
