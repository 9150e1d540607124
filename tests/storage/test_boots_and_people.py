from __future__ import annotations

from datetime import timedelta

import pytest

from registry.domain.boot import Boot, BootSheet, BootStatement
from registry.domain.maintenance import Maintenance
from registry.domain.person import KeyOwner, KeyRecord, Person
from registry.storage import boots, maintenance, people
from registry.storage.engine import DatabaseError


def boot_of(boot_id, booted_at, calibration_id=None, matched=True):
    statement = BootStatement(4, "d" * 64, "kept", booted_at, 86400.5, "drive 2.1")
    return Boot(boot_id, "tub-7", statement, booted_at, calibration_id, matched, booted_at + timedelta(seconds=9))


def key_of(key_id, clock, **owner):
    fields = {"person": None, "vehicle_id": None, "role": None} | owner
    revoked_at = fields.pop("revoked_at", None)
    return KeyRecord(key_id, key_id.ljust(64, "0"), recorded_at=clock(), revoked_at=revoked_at, **fields)


def test_boots_come_back_as_reported_and_the_latest_is_by_their_own_time(services, clock, proposer):
    adopted = proposer.adopt()
    late = boot_of("late", clock(), adopted.calibration_id)
    early = boot_of("early", clock() - timedelta(days=2), None, matched=False)
    with services.write() as c:
        boots.add(c, late)
        boots.add(c, early)
    with services.read() as c:
        assert boots.all_for(c, "tub-7") == [early, late]
        assert boots.latest(c, "tub-7") == late
        assert boots.latest(c, "tub-7", clock() - timedelta(days=1)) == early
        assert boots.latest(c, "tub-7", clock() - timedelta(days=3)) is None
        assert list(boots.page(c, "tub-7", 5, None).items) == [late, early]
        assert boots.loaded_by(c, adopted.calibration_id) == ("tub-7",)


def test_the_key_and_the_sheet_of_a_boot_come_in_one_query(services, clock, proposer):
    adopted = proposer.adopt()
    sheet = BootSheet("tub-7", adopted.calibration_id, 1, "VEHICLE_ID=tub-7\n", "e" * 64, "good", ("because",), "{")
    key = key_of("k1", clock, vehicle_id="tub-7")
    with services.write() as c:
        boots.put_sheet(c, "tub-7", sheet)
        people.add_key(c, key)
    with services.ask() as bare:
        sent: list[str] = []
        owner = KeyOwner(None, "tub-7", None)
        bare.connection.driver_connection.set_trace_callback(sent.append)
        assert boots.sheet_with_key(bare, key.key_hash, "tub-7") == (owner, sheet)
        assert len(sent) == 1
        bare.connection.driver_connection.set_trace_callback(None)
        assert boots.sheet_with_key(bare, key.key_hash, "tub-8") == (owner, None)
        assert boots.sheet_with_key(bare, "0" * 64, "tub-7") == (None, None)
    with services.read() as c:
        assert boots.sheet(c, "tub-7") == sheet
        assert boots.all_sheets(c) == {"tub-7": sheet}
    with services.write() as c:
        boots.put_sheet(c, "tub-7", None)
        assert boots.sheet(c, "tub-7") is None


def test_a_revoked_key_has_no_owner_and_a_persons_key_has_a_role(services, clock, proposer):
    proposer.adopt()
    revoked = key_of("k1", clock, vehicle_id="tub-7", revoked_at=clock())
    with services.write() as c:
        people.add(c, Person("Kim", "keeper", "hash", clock()))
        people.add_key(c, revoked)
        people.add_key(c, key_of("k2", clock, person="Kim"))
    with services.ask() as bare:
        assert boots.sheet_with_key(bare, revoked.key_hash, "tub-7") == (None, None)
        owner, sheet = boots.sheet_with_key(bare, "k2".ljust(64, "0"), "tub-7")
    assert owner == KeyOwner("Kim", None, "keeper")
    assert sheet is not None
    assert sheet.calibration_number == 1


def test_people_and_the_role_of_their_keys(services, clock, vehicle):
    kim = Person("Kim", "keeper", "hash", clock())
    abel = Person("Abel", "approver", "hash", clock())
    with services.write() as c:
        people.add(c, kim)
        people.add(c, abel)
        people.add_key(c, key_of("k1", clock, person="Kim"))
        assert people.all_people(c) == [abel, kim]
        assert people.by_name(c, "kim") is None
        assert people.key_by_hash(c, "k1".ljust(64, "0")) == key_of("k1", clock, person="Kim", role="keeper")
    with pytest.raises(DatabaseError, match="UNIQUE"), services.write() as c:
        people.add(c, kim)


def test_the_newest_valid_key_of_a_vehicle(services, clock, vehicle):
    with services.write() as c:
        assert people.newest_vehicle_key(c, "tub-7") is None
        people.add_key(c, key_of("old", clock, vehicle_id="tub-7"))
        people.add_key(c, key_of("new", clock, vehicle_id="tub-7"))
        people.add_key(c, key_of("revoked", clock, vehicle_id="tub-7", revoked_at=clock()))
        newest = people.newest_vehicle_key(c, "tub-7")
    assert newest is not None
    assert newest.key_id == "new"


def test_the_database_refuses_a_key_of_nobody_and_of_two(services, clock, vehicle):
    with pytest.raises(DatabaseError, match="one_owner"), services.write() as c:
        people.add_key(c, key_of("k", clock))
    with services.write() as c:
        people.add(c, Person("Kim", "keeper", "hash", clock()))
    with pytest.raises(DatabaseError, match="one_owner"), services.write() as c:
        people.add_key(c, key_of("k", clock, person="Kim", vehicle_id="tub-7"))


def test_maintenance_comes_back_and_the_latest_window_end_is_by_when_it_was_done(services, clock, vehicle):
    def work(name, days, ends, recorded_days=0):
        done, recorded = clock() - timedelta(days=days), clock() - timedelta(days=recorded_days)
        return Maintenance(name, "tub-7", done, "part_fitted", "left", "new band", ends, recorded, "Tove")

    entries = [work("a", 9, True, 8), work("b", 2, False), work("c", 5, True)]
    with services.write() as c:
        for entry in entries:
            maintenance.add(c, entry)
    with services.read() as c:
        assert maintenance.all_for(c, "tub-7") == [entries[0], entries[2], entries[1]]
        assert list(maintenance.page(c, "tub-7", 9, None).items) == [entries[1], entries[2], entries[0]]
        assert maintenance.latest_window_end(c, "tub-7", clock()) == entries[2]
        assert maintenance.latest_window_end(c, "tub-7", clock() - timedelta(days=6)) == entries[0]
        assert maintenance.latest_window_end(c, "tub-7", clock() - timedelta(days=20)) is None
        assert maintenance.window_ends(c, "tub-7") == [entries[0], entries[2]]
        assert maintenance.window_ends(c, "tub-7", None, clock() - timedelta(days=1)) == [entries[0]]
        assert maintenance.window_ends(c, "tub-7", clock() - timedelta(days=6)) == [entries[0]]
