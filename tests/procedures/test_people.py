from __future__ import annotations

import hashlib

import pytest

from registry.domain.person import Actor
from registry.errors import Conflict, Invalid, NotAllowed, NotFound
from registry.procedures.people import actor_for_key, add_person, check_password, issue_key
from registry.storage import journal, people
from registry.storage.journal import JournalFilter


def test_a_person_signs_in_with_the_right_password_only(services, keeper):
    add_person(services, keeper, "Ida", "technician", "oak-bridge-9")
    person = check_password(services, "Ida", "oak-bridge-9")
    assert person is not None
    assert person.role == "technician"
    assert check_password(services, "Ida", "oak-bridge-8") is None
    assert check_password(services, "ida", "oak-bridge-9") is None
    assert check_password(services, "Nobody", "oak-bridge-9") is None
    assert check_password(services, "Ida", "\ud800") is None


def test_a_password_is_stored_only_as_an_argon2_hash(services, keeper):
    person = add_person(services, keeper, "Ida", "technician", "oak-bridge-9")
    assert person.password_hash.startswith("$argon2id$")
    with services.read() as c:
        told = " ".join(entry.what for entry in journal.page(c, JournalFilter(), 9, None).items)
    assert "oak-bridge" not in told
    assert "argon2" not in told


@pytest.mark.parametrize(
    ("name", "role", "password", "pointer"),
    [
        ("", "reader", "oak-bridge", "/name"),
        (" Ida", "reader", "oak-bridge", "/name"),
        ("vehicle:tub-7", "reader", "oak-bridge", "/name"),
        ("I\nda", "reader", "oak-bridge", "/name"),
        ("x" * 101, "reader", "oak-bridge", "/name"),
        ("Ida", "owner", "oak-bridge", "/role"),
        ("Ida", "reader", "short", "/password"),
        ("Ida", "reader", "x" * 1001, "/password"),
        ("Ida", "reader", "oak-bri\udc00", "/password"),
    ],
)
def test_names_roles_and_passwords_that_cannot_be_are_refused(services, keeper, name, role, password, pointer):
    with pytest.raises(Invalid) as refused:
        add_person(services, keeper, name, role, password)
    assert [error.pointer for error in refused.value.errors] == [pointer]
    with services.read() as c:
        assert people.all_people(c) == []


def test_a_name_is_given_once(services, keeper):
    add_person(services, keeper, "Ida", "technician", "oak-bridge-9")
    with pytest.raises(Conflict, match="already"):
        add_person(services, keeper, "Ida", "keeper", "other-bridge")


def test_only_keepers_and_the_local_account_add_people_and_keys(services, approver, local, vehicle):
    with pytest.raises(NotAllowed):
        add_person(services, approver, "Ida", "technician", "oak-bridge-9")
    with pytest.raises(NotAllowed):
        issue_key(services, approver, vehicle_id="tub-7")
    add_person(services, local, "Ida", "keeper", "oak-bridge-9")
    assert issue_key(services, local, person="Ida")


def test_a_key_acts_for_its_owner_and_only_its_hash_is_kept(services, keeper, vehicle, migrated_file):
    add_person(services, keeper, "Ida", "technician", "oak-bridge-9")
    person_key = issue_key(services, keeper, person="Ida")
    vehicle_key = issue_key(services, keeper, vehicle_id="tub-7")
    assert actor_for_key(services, person_key) == Actor("person", "Ida", "technician")
    assert actor_for_key(services, vehicle_key) == Actor("vehicle", "tub-7")
    assert actor_for_key(services, person_key[:-1]) is None
    assert len(person_key) >= 43
    with services.read() as c:
        record = people.newest_vehicle_key(c, "tub-7")
    assert record is not None
    assert record.key_hash == hashlib.sha256(vehicle_key.encode()).hexdigest()
    stored = (services.settings.home / "rollbook.db").read_bytes()
    stored += (services.settings.home / "rollbook.db-wal").read_bytes()
    assert vehicle_key.encode() not in stored
    assert record.key_hash.encode() in stored


def test_a_key_needs_one_owner_that_exists(services, keeper, vehicle):
    with pytest.raises(Invalid, match="either"):
        issue_key(services, keeper)
    with pytest.raises(Invalid, match="either"):
        issue_key(services, keeper, person="Ida", vehicle_id="tub-7")
    with pytest.raises(NotFound, match="Ida"):
        issue_key(services, keeper, person="Ida")
    with pytest.raises(NotFound, match="tub-9"):
        issue_key(services, keeper, vehicle_id="tub-9")
