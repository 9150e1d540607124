from __future__ import annotations

import pytest

from registry.domain.person import ROLES, Actor, Person
from registry.errors import NotAllowed
from registry.procedures.authority import actor_of, require, require_adopter, require_vehicle
from registry.storage import people


@pytest.mark.parametrize("held", ROLES)
@pytest.mark.parametrize("needed", ROLES)
def test_each_role_includes_the_ones_before_it(held, needed):
    actor = Actor("person", "Ida", held)
    if ROLES.index(held) >= ROLES.index(needed):
        require(actor, needed)
    else:
        with pytest.raises(NotAllowed, match=f"needs the role {needed}"):
            require(actor, needed)


def test_a_vehicle_acts_for_itself_and_for_nothing_else():
    actor = Actor("vehicle", "tub-7")
    require_vehicle(actor, "tub-7", "keeper")
    with pytest.raises(NotAllowed, match="may not act for 'tub-8'"):
        require_vehicle(actor, "tub-8", "reader")
    with pytest.raises(NotAllowed):
        require(actor, "reader")


def test_the_schedule_may_not_do_what_people_decide(services):
    with pytest.raises(NotAllowed):
        require(Actor("schedule", "fleet pass"), "reader")
    with services.read() as c, pytest.raises(NotAllowed):
        require_adopter(c, Actor("schedule", "fleet pass"))


def test_the_local_account_adopts_only_while_nobody_else_could(services, clock, local, approver, technician):
    with services.write() as c:
        require_adopter(c, local)
        people.add(c, Person("Tove", "technician", "hash", clock()))
        require_adopter(c, local)
        people.add(c, Person("Abel", "approver", "hash", clock()))
        with pytest.raises(NotAllowed, match=r"\(Abel\).*ROLLBOOK_KEY"):
            require_adopter(c, local)
        require_adopter(c, approver)
        with pytest.raises(NotAllowed):
            require_adopter(c, technician)


def test_an_unknown_key_is_nobody():
    assert actor_of(None) is None
