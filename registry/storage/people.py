"""People and API keys. Of a key only its hash is kept."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Row, Select, insert, select

from registry.domain.person import KeyRecord, Person
from registry.storage.engine import Connection
from registry.storage.tables import keys, people

#: Keys with the role of the person who holds each.
KEYS: Select[Any] = select(keys, people.c.role).outerjoin(people, people.c.name == keys.c.person)


def add(c: Connection, person: Person) -> None:
    """Record a person."""
    c.execute(
        insert(people).values(
            name=person.name, role=person.role, password_hash=person.password_hash, recorded_at=person.recorded_at
        )
    )


def by_name(c: Connection, name: str) -> Person | None:
    """A person by the exact name, if there is one."""
    row = c.execute(select(people).where(people.c.name == name)).first()
    return None if row is None else _person(row)


def all_people(c: Connection) -> list[Person]:
    """All people by name."""
    return [_person(row) for row in c.execute(select(people).order_by(people.c.name))]


def add_key(c: Connection, key: KeyRecord) -> None:
    """Record a key's hash and owner."""
    c.execute(
        insert(keys).values(
            key_id=key.key_id,
            key_hash=key.key_hash,
            person=key.person,
            vehicle_id=key.vehicle_id,
            recorded_at=key.recorded_at,
            revoked_at=key.revoked_at,
        )
    )


def key_by_hash(c: Connection, key_hash: str) -> KeyRecord | None:
    """The key of a hash (lower-case hex), revoked or not, if there is one."""
    row = c.execute(KEYS.where(keys.c.key_hash == key_hash)).first()
    return None if row is None else key_record(row)


def newest_vehicle_key(c: Connection, vehicle_id: str) -> KeyRecord | None:
    """A vehicle's newest key that is not revoked, if it has one."""
    valid = KEYS.where(keys.c.vehicle_id == vehicle_id, keys.c.revoked_at.is_(None))
    row = c.execute(valid.order_by(keys.c.sequence.desc()).limit(1)).first()
    return None if row is None else key_record(row)


def key_record(row: Row[Any]) -> KeyRecord:
    """The key in a row of ``KEYS``."""
    return KeyRecord(
        key_id=row.key_id,
        key_hash=row.key_hash,
        person=row.person,
        vehicle_id=row.vehicle_id,
        role=row.role,
        recorded_at=row.recorded_at,
        revoked_at=row.revoked_at,
    )


def _person(row: Row[Any]) -> Person:
    return Person(row.name, row.role, row.password_hash, row.recorded_at)
