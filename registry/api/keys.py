"""Who is asking: the key of a request, and what each door needs of it.

A door says what it needs where it is written (`needs`). One gate in front of all doors reads the key, so that nobody
without one learns anything or has a body read; procedures ask again for what they do, for every door alike.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from http import HTTPStatus
from inspect import cleandoc
from threading import Lock
from typing import TypeVar, get_type_hints

from flask import Flask, Response, current_app, g, request
from werkzeug.exceptions import TooManyRequests
from werkzeug.wrappers import Response as BaseResponse

from registry.api import problems
from registry.api.bodies import Query
from registry.api.strict_json import escaped
from registry.domain.person import Actor, Role
from registry.errors import FieldError, Invalid, NotAllowed, NotSignedIn
from registry.procedures import people
from registry.services import Services

_View = TypeVar("_View", bound=Callable[..., object])
_EXTENSION = "rollbook.api"
#: Addresses that are counted at once, before those of a past window are dropped.
_ADDRESSES = 10_000


@dataclass(frozen=True)
class Door:
    """What a door needs: a person's least role, whether a vehicle may use it for itself, its query parameters.

    ``gated`` False: the handler checks the key itself, together with its one query.
    """

    role: Role
    own_vehicle: bool = False
    gated: bool = True
    query_names: frozenset[str] = frozenset()


def needs(role: Role, *, own_vehicle: bool = False, gated: bool = True) -> Callable[[_View], _View]:
    """Say what a handler needs of a key, to the gate and in the document. Stands below the route's decorator."""
    told = f"Needs the role {role} or one above it{', or the key of the vehicle itself' if own_vehicle else ''}."

    def mark(view: _View) -> _View:
        query: type[Query] | None = get_type_hints(view).get("query")
        names = () if query is None else (info.alias or name for name, info in query.model_fields.items())
        view.__doc__ = f"{cleandoc(view.__doc__ or '')}\n\n{told}"
        vars(view)["door"] = Door(role, own_vehicle, gated, frozenset(names))
        return view

    return mark


@dataclass
class WrongKeys:
    """Counts wrong keys by address, so that guessing is slow. Valid keys from the same address are never touched."""

    limit: int = 20
    window: timedelta = timedelta(minutes=1)
    _since: dict[str, tuple[datetime, int]] = field(default_factory=dict)
    _lock: Lock = field(default_factory=Lock)

    def count(self, address: str, now: datetime) -> datetime | None:
        """Note one wrong key. When this address has sent too many, say when its next one is looked at again."""
        with self._lock:
            if len(self._since) > _ADDRESSES:
                self._since = {who: kept for who, kept in self._since.items() if now - kept[0] < self.window}
            begun, wrong = self._since.get(address, (now, 0))
            if now - begun >= self.window:
                begun, wrong = now, 0
            self._since[address] = (begun, wrong + 1)
        return begun + self.window if wrong >= self.limit else None


@dataclass(frozen=True)
class Gate:
    """Stands before every door of the API."""

    services: Services
    doors: Mapping[str, Door]
    wrong_keys: WrongKeys = field(default_factory=WrongKeys)

    def check(self) -> None:
        """
        Let a request through to its door, or refuse it.

        Raises
        ------
        NotSignedIn, NotAllowed, Invalid
            No valid key; a key that may not do this; a query parameter that the door does not know or has twice.
        """
        door = self.doors.get(request.endpoint or "")
        if door is None:
            return
        text = key()
        if door.gated:
            g.actor = admitted(actor_of(text), door, (request.view_args or {}).get("vehicle_id"))
        for name, values in request.args.lists():
            if name not in door.query_names:
                detail = "is not a query parameter of this door: remove it"
                raise Invalid(f"{name} {detail}", (FieldError(f"/{escaped(name)}", detail),))
            if len(values) > 1:
                raise Invalid(f"{name} is given twice", (FieldError(f"/{escaped(name)}", "is given twice: keep one"),))

    def slow_down(self, response: Response) -> BaseResponse:
        """Count a wrong key against its address; from too many of them the answer is to wait."""
        refused = response.status_code == HTTPStatus.UNAUTHORIZED and request.endpoint in self.doors
        if not refused or "Authorization" not in request.headers:
            return response
        come_back = self.wrong_keys.count(request.remote_addr or "", self.services.now())
        if come_back is None:
            return response
        detail = "Too many wrong keys from this address: wait, and send a key that was issued here."
        return problems.answer(TooManyRequests(detail, retry_after=come_back))


def key() -> str:
    """
    The key that came with the request.

    Raises
    ------
    NotSignedIn
        There is none.
    """
    scheme, _, text = request.headers.get("Authorization", "").partition(" ")
    text = text.strip()
    if scheme.lower() != "bearer" or not text:
        raise NotSignedIn("Send the header Authorization: Bearer KEY with a key that was issued here.")
    return text


def admitted(actor: Actor, door: Door, vehicle_id: str | None) -> Actor:
    """
    Let an actor through a door.

    Raises
    ------
    NotAllowed
        A person of too low a role; a vehicle at a door that is not its own.
    """
    if actor.kind == "vehicle":
        if not door.own_vehicle or vehicle_id != actor.name:
            raise NotAllowed("A vehicle's key reads its own parameters and sends its own runs and boots, nothing else.")
    elif not actor.may(door.role):
        raise NotAllowed(f"This needs the role {door.role} or one above it.")
    return actor


def actor_of(text: str) -> Actor:
    """
    Who acts under a key.

    Raises
    ------
    NotSignedIn
        It is not valid.
    """
    known = people.actor_for_key(services(), text)
    if known is None:
        raise NotSignedIn("The key is not valid: it was never issued here, or has been revoked.")
    return known


def actor() -> Actor:
    """Who is asking, as the gate found it."""
    asking: Actor = g.actor
    return asking


def services() -> Services:
    """The services of the running application."""
    return gate().services


def gate() -> Gate:
    """The gate of the running application."""
    standing: Gate = current_app.extensions[_EXTENSION]
    return standing


def stand_before(app: Flask, services: Services) -> Gate:
    """
    Put the gate before all doors that are registered.

    Parameters
    ----------
    app
        With every door registered already, and nothing else under ``/api``.

    Raises
    ------
    LookupError
        When a door says nothing of what it needs: it would stand open.
    """
    doors = {name: vars(view)["door"] for name, view in app.view_functions.items() if "door" in vars(view)}
    for rule in app.url_map.iter_rules():
        if rule.rule.startswith("/api/") and rule.endpoint not in doors:
            raise LookupError(f"{rule.rule} says nothing of what it needs: mark its handler with needs(…)")
    standing = Gate(services, doors)
    app.extensions[_EXTENSION] = standing
    app.before_request(standing.check)
    app.after_request(standing.slow_down)
    return standing
