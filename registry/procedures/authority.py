"""Who may do what. Every procedure begins here."""

from __future__ import annotations

from registry.domain.person import ROLES, Actor, KeyOwner, Role
from registry.errors import NotAllowed
from registry.storage import people
from registry.storage.engine import Connection


def require(actor: Actor, role: Role) -> None:
    """Refuse an actor who may not do what ``role`` may do.

    Raises
    ------
    NotAllowed
        With the role that is needed.
    """
    if not actor.may(role):
        raise NotAllowed(f"{actor} may not do this: it needs the role {role}")


def require_vehicle(actor: Actor, vehicle_id: str, role: Role) -> None:
    """Let a vehicle act for itself and nothing else; anyone else needs ``role``.

    Raises
    ------
    NotAllowed
        Another vehicle's key, or too low a role.
    """
    if actor.kind != "vehicle":
        require(actor, role)
    elif actor.name != vehicle_id:
        raise NotAllowed(f"the key of vehicle {actor.name!r} may not act for {vehicle_id!r}")


def require_adopter(c: Connection, actor: Actor) -> None:
    """Let an approver put into force and withdraw; the local account only while nobody else could.

    Raises
    ------
    NotAllowed
        With the role that is needed, or the way to act as a person.
    """
    if actor.kind != "local":
        require(actor, "approver")
        return
    able = [person for person in people.all_people(c) if ROLES.index(person.role) >= ROLES.index("approver")]
    if able:
        raise NotAllowed(
            f"there is someone to put into force and withdraw ({able[0].name}): sign in, or give that person's key in "
            "ROLLBOOK_KEY"
        )


def actor_of(owner: KeyOwner | None) -> Actor | None:
    """Who acts under a valid key; None when it has no owner."""
    if owner is None:
        return None
    if owner.vehicle_id is not None:
        return Actor("vehicle", owner.vehicle_id)
    return None if owner.person is None else Actor("person", owner.person, owner.role)
