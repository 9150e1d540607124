from __future__ import annotations

import json
from dataclasses import replace

import pytest

from registry.errors import Invalid, NotAllowed, PreconditionFailed, PreconditionRequired
from registry.procedures import boot
from registry.procedures.registration import put_vehicle
from registry.storage import journal, vehicles
from registry.storage.journal import JournalFilter


def actions(services):
    with services.read() as c:
        return [(e.action, e.vehicle_id) for e in journal.page(c, JournalFilter(), 50, None).items]


def test_a_vehicle_is_registered_once_and_the_same_again_changes_nothing(services, approver, statement, clock):
    first, created = put_vehicle(services, approver, "tub-7", statement)
    assert created
    clock.move(days=1)
    again, created = put_vehicle(services, approver, "tub-7", statement)
    assert not created
    assert again == first
    assert actions(services) == [("vehicle registered", "tub-7")]


def test_other_values_need_the_version_that_was_seen_and_make_a_new_one(services, approver, statement, vehicle, clock):
    other = replace(statement, counter_bits=16)
    with pytest.raises(PreconditionRequired, match="ETag"):
        put_vehicle(services, approver, "tub-7", other)
    with pytest.raises(PreconditionFailed):
        put_vehicle(services, approver, "tub-7", other, "0" * 32)
    clock.move(days=1)
    made, created = put_vehicle(services, approver, "tub-7", other, statement.etag())
    assert not created
    assert (made.version, made.valid_from) == (2, clock())
    with pytest.raises(PreconditionFailed):
        put_vehicle(services, approver, "tub-7", statement, statement.etag())
    with services.read() as c:
        assert [one.statement.counter_bits for one in vehicles.versions(c, "tub-7")] == [32, 16]
    entry = actions(services)[0]
    assert entry == ("vehicle changed", "tub-7")


def test_naming_a_version_of_an_unknown_vehicle_fails(services, approver, statement):
    with pytest.raises(PreconditionFailed):
        put_vehicle(services, approver, "tub-9", statement, statement.etag())


def test_a_new_counting_set_up_reaches_the_next_boot(services, approver, statement, proposer):
    proposer.adopt()
    before = boot.parameters(services, approver, "tub-7")
    put_vehicle(services, approver, "tub-7", replace(statement, counter_bits=16), statement.etag())
    after = boot.parameters(services, approver, "tub-7")
    assert "COUNTING_BITS=16\n" in after.head
    assert after.digest != before.digest
    assert json.loads(after.answer + "}")["counting"] == {"bits": 16}


@pytest.mark.parametrize("vehicle_id", ["", "a" * 65, "tub 7", "tub/7", "tüb", "tub\n", ".", ".."])
def test_an_identity_that_no_vehicle_can_have_is_refused(services, approver, statement, vehicle_id):
    with pytest.raises(Invalid, match="1 to 64 letters") as refused:
        put_vehicle(services, approver, vehicle_id, statement)
    assert refused.value.errors[0].pointer == "/vehicle_id"


def test_a_technician_may_not_register(services, technician, statement):
    with pytest.raises(NotAllowed, match="approver"):
        put_vehicle(services, technician, "tub-7", statement)
    assert actions(services) == []
