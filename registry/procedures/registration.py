"""Puts a vehicle on the register, or gives a known one a new dated version of what is stated about it."""

from __future__ import annotations

import re
from dataclasses import asdict

from registry.domain.person import Actor
from registry.domain.vehicle import VehicleStatement, VehicleVersion
from registry.errors import FieldError, Invalid, PreconditionFailed, PreconditionRequired
from registry.procedures.authority import require
from registry.procedures.boot_sheets import refresh_sheet
from registry.services import Services
from registry.storage import journal, vehicles

_VEHICLE_ID = re.compile(r"[A-Za-z0-9._-]{1,64}")


def put_vehicle(
    services: Services, actor: Actor, vehicle_id: str, statement: VehicleStatement, if_match: str | None = None
) -> tuple[VehicleVersion, bool]:
    """State what a vehicle is.

    The same statement again changes nothing. Another one makes a new version from now on: runs already recorded keep
    theirs.

    Parameters
    ----------
    if_match
        Entity tag of the version that the caller saw; needed to change a known vehicle.

    Returns
    -------
    tuple of VehicleVersion and bool
        The version that holds, and whether this call made the vehicle.

    Raises
    ------
    Invalid
        The identity has a form that no vehicle can have.
    PreconditionRequired
        A known vehicle would change and no version was named.
    PreconditionFailed
        The version named is not the current one.
    """
    require(actor, "approver")
    if not _VEHICLE_ID.fullmatch(vehicle_id) or vehicle_id in (".", ".."):
        detail = "must be 1 to 64 letters, digits, '.', '_' or '-'"
        raise Invalid(f"vehicle_id {detail}", (FieldError("/vehicle_id", detail),))
    with services.write() as c:
        known = vehicles.find_current(c, vehicle_id)
        if if_match is not None and (known is None or if_match not in ("*", known.statement.etag())):
            raise PreconditionFailed(f"If-Match does not name the current version of {vehicle_id!r}: read it again")
        if known is not None and known.statement == statement:
            return known, False
        if known is not None and if_match is None:
            raise PreconditionRequired(
                f"vehicle {vehicle_id!r} is known with other values: read it and send its ETag as If-Match to change it"
            )
        now = services.now()
        made = vehicles.add_version(c, vehicle_id, statement, now, str(actor))
        action = "vehicle registered" if known is None else "vehicle changed"
        what = {"version": made.version, **asdict(statement)}
        journal.write(c, now, str(actor), action, vehicle_id, what)
        refresh_sheet(c, vehicle_id, now)
    return made, known is None
