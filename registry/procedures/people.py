"""Adds people, checks their passwords, and hands out API keys, each shown once."""

from __future__ import annotations

import hashlib
import secrets
import unicodedata
from functools import cache

from argon2 import PasswordHasher
from argon2.exceptions import InvalidHashError, VerificationError

from registry.domain.person import ROLES, Actor, KeyOwner, KeyRecord, Person, Role
from registry.errors import Conflict, FieldError, Invalid, NotFound
from registry.procedures.authority import actor_of, require
from registry.services import Services
from registry.storage import journal, people, vehicles

_HASHER = PasswordHasher()
LEAST_PASSWORD_LENGTH = 6


def add_person(services: Services, actor: Actor, name: str, role: Role, password: str) -> Person:
    """Add a person who can sign in.

    Raises
    ------
    Invalid
        Name, role or password is not of a form that can be.
    Conflict
        There is someone of that name.
    """
    require(actor, "keeper")
    _check_form(name, role, password)
    hashed = _HASHER.hash(password)
    with services.write() as c:
        if people.by_name(c, name) is not None:
            raise Conflict(f"there is a person named {name!r} already: choose another name")
        now = services.now()
        person = Person(name, role, hashed, now)
        people.add(c, person)
        journal.write(c, now, str(actor), "person added", None, {"name": name, "role": role})
    return person


def check_password(services: Services, name: str, password: str) -> Person | None:
    """The person of that name and password, or None; takes as long for an unknown name."""
    with services.read() as c:
        person = people.by_name(c, name)
    try:
        _HASHER.verify(_nobody() if person is None else person.password_hash, password)
    except (VerificationError, InvalidHashError, UnicodeEncodeError):
        return None
    return person


def issue_key(services: Services, actor: Actor, *, person: str | None = None, vehicle_id: str | None = None) -> str:
    """Make a new API key for a person or a vehicle. The text answered is shown once; only its hash is kept.

    Raises
    ------
    Invalid
        Not exactly one owner was named.
    NotFound
        No such person or vehicle.
    """
    require(actor, "keeper")
    if (person is None) == (vehicle_id is None):
        raise Invalid("name either a person or a vehicle for the key")
    key = secrets.token_urlsafe(32)
    with services.write() as c:
        now = services.now()
        owner = None if person is None else people.by_name(c, person)
        if vehicle_id is not None:
            vehicles.current(c, vehicle_id)
        elif owner is None:
            raise NotFound(f"there is no person named {person!r}")
        record = KeyRecord(
            key_id=services.new_id(),
            key_hash=hashlib.sha256(key.encode()).hexdigest(),
            person=person,
            vehicle_id=vehicle_id,
            role=None if owner is None else owner.role,
            recorded_at=now,
            revoked_at=None,
        )
        people.add_key(c, record)
        what = {"key_id": record.key_id, "person": person}
        journal.write(c, now, str(actor), "key issued", vehicle_id, what)
    return key


def actor_for_key(services: Services, key: str) -> Actor | None:
    """Who acts under a key; None when it is unknown or revoked."""
    with services.read() as c:
        record = people.key_by_hash(c, hashlib.sha256(key.encode()).hexdigest())
    if record is None or record.revoked_at is not None:
        return None
    return actor_of(KeyOwner(record.person, record.vehicle_id, record.role))


@cache
def _nobody() -> str:
    """Checked in place of an unknown person's hash, so that an unknown name takes as long as a wrong password."""
    return _HASHER.hash(secrets.token_urlsafe(16))


def _check_form(name: str, role: str, password: str) -> None:
    errors = []
    written = name.strip() == name and 1 <= len(name) <= 100
    if not written or ":" in name or any(unicodedata.category(letter)[0] == "C" for letter in name):
        errors.append(FieldError("/name", "must be 1 to 100 characters without ':' and control characters"))
    if role not in ROLES:
        errors.append(FieldError("/role", f"must be one of {', '.join(ROLES)}"))
    if not LEAST_PASSWORD_LENGTH <= len(password) <= 1000 or not _encodable(password):
        errors.append(FieldError("/password", f"must have {LEAST_PASSWORD_LENGTH} to 1000 characters"))
    if errors:
        raise Invalid("; ".join(f"{error.pointer[1:]} {error.detail}" for error in errors), tuple(errors))


def _encodable(text: str) -> bool:
    return all(unicodedata.category(letter) != "Cs" for letter in text)
