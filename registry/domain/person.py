"""People, their roles, API keys, and who is acting."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal, get_args

Role = Literal["reader", "technician", "approver", "keeper"]
#: Each role includes the ones before it.
ROLES: tuple[Role, ...] = get_args(Role)


@dataclass(frozen=True)
class Person:
    name: str
    role: Role
    password_hash: str
    recorded_at: datetime


@dataclass(frozen=True)
class Actor:
    """Who is asking: a person with a role, a vehicle with its own key, the local account, or the schedule."""

    kind: Literal["person", "vehicle", "local", "schedule"]
    name: str
    role: Role | None = None

    def may(self, role: Role) -> bool:
        """Whether this actor may do what ``role`` may do. The local account holds the files; it may act (and is
        named).
        """
        if self.kind == "local":
            return True
        return self.role is not None and ROLES.index(self.role) >= ROLES.index(role)

    def __str__(self) -> str:
        return self.name if self.kind == "person" else f"{self.kind}:{self.name}"


@dataclass(frozen=True)
class KeyRecord:
    """An API key: only its SHA-256 (hex) is kept."""

    key_id: str
    key_hash: str
    person: str | None
    vehicle_id: str | None
    role: Role | None
    recorded_at: datetime
    revoked_at: datetime | None


@dataclass(frozen=True)
class KeyOwner:
    """Whose a valid key is: a person's with a role, or a vehicle's."""

    person: str | None
    vehicle_id: str | None
    role: Role | None


@dataclass(frozen=True)
class JournalEntry:
    """Who did what, when, why. ``what`` is JSON text; each entry's hash covers the one before."""

    entry: int
    at: datetime
    who: str
    action: str
    vehicle_id: str | None
    what: str
    previous_hash: str
    hash: str
