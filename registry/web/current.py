"""What a page needs of its application: the services, and who is signed in."""

from __future__ import annotations

from flask import current_app, g
from flask_login import current_user

from registry.domain.person import Actor, Person, Role
from registry.services import Services

EXTENSION = "rollbook.web"


def services() -> Services:
    """The services of the running application."""
    running: Services = current_app.extensions[EXTENSION]
    return running


def forget_person() -> None:
    """Answer the rest of this request as to nobody: who is signed in may be just what cannot be read."""
    g.rollbook_nobody = True


def person() -> Person | None:
    """The person who is signed in, if anyone is."""
    if g.get("rollbook_nobody", False):
        return None
    return current_user.person if current_user.is_authenticated else None


def may(role: Role) -> bool:
    """Whether whoever is signed in may do what ``role`` may do; pages show only what they may."""
    return person() is not None and actor().may(role)


def actor() -> Actor:
    """The signed-in person as the one who acts. The guard before every page has seen to it that there is one."""
    signed_in: Person = current_user.person
    return Actor("person", signed_in.name, signed_in.role)
