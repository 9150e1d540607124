"""What a vehicle is to load at boot, as asked for at a door: over HTTP, as a file to carry, or for a past time."""

from __future__ import annotations

import hashlib
from datetime import datetime

from registry.domain.boot import BootSheet
from registry.domain.person import Actor
from registry.errors import Conflict, NotSignedIn
from registry.procedures.authority import actor_of, require_vehicle
from registry.procedures.boot_report import report_boot
from registry.procedures.boot_sheets import awaiting, build_sheet, refresh_sheet
from registry.procedures.boot_text import etag_of, render, render_lines
from registry.services import Services
from registry.storage import boots, people

__all__ = [
    "awaiting", "build_sheet", "etag_of", "fetch", "parameters", "parameters_file", "refresh_sheet", "render",
    "render_lines", "report_boot",
]  # fmt: skip


def parameters(
    services: Services, actor: Actor, vehicle_id: str, at: datetime | None = None, known_at: datetime | None = None
) -> BootSheet:
    """What a vehicle is, or was, to load; see `build_sheet`."""
    require_vehicle(actor, vehicle_id, "reader")
    with services.read() as c:
        return build_sheet(c, vehicle_id, at, known_at)


def parameters_file(services: Services, actor: Actor, vehicle_id: str) -> bytes:
    """The parameters as lines to carry to a vehicle, tagged under its newest valid key.

    Raises
    ------
    Conflict
        The vehicle has no key that the file could be tagged with.
    """
    require_vehicle(actor, vehicle_id, "reader")
    with services.read() as c:
        sheet = build_sheet(c, vehicle_id)
        key = people.newest_vehicle_key(c, vehicle_id)
    if key is None:
        raise Conflict(f"vehicle {vehicle_id!r} has no key to check a carried file with: issue one for it first")
    return render_lines(sheet, bytes.fromhex(key.key_hash))


def fetch(services: Services, key: str, vehicle_id: str) -> tuple[BootSheet, bytes]:
    """The boot path: check the key and answer the kept sheet, in one query.

    Returns
    -------
    tuple
        The sheet and the 32 raw bytes that its tag is made with.

    Raises
    ------
    NotSignedIn
        No valid key.
    NotAllowed
        Another vehicle's key.
    NotFound, NothingInForce
        No such vehicle, or nothing for it to load.
    """
    key32 = hashlib.sha256(key.encode()).digest()
    with services.ask() as bare:
        owner, sheet = boots.sheet_with_key(bare, key32.hex(), vehicle_id)
    actor = actor_of(owner)
    if actor is None:
        raise NotSignedIn("send a valid API key as 'Authorization: Bearer KEY'")
    require_vehicle(actor, vehicle_id, "reader")
    if sheet is None:
        # Building says which of the two it is: no such vehicle, or nothing in force.
        with services.read() as c:
            sheet = build_sheet(c, vehicle_id)
    return sheet, key32
