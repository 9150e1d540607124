"""Boots: a vehicle's report of the parameters that it loaded."""

from __future__ import annotations

from typing import Annotated

from flask import Response
from pydantic import Field

from registry.api import fields
from registry.api.bodies import Answer, Body, Described, VehiclePath, reply
from registry.api.document import resource
from registry.api.keys import actor, needs, services
from registry.domain.boot import Boot, BootSource, BootStatement
from registry.procedures.boot import report_boot

doors = resource("boots")


class BootBody(Body):
    """What was loaded, by number or digest, whatever its source. `built_in` may have neither: it is then a mismatch."""

    calibration_number: Annotated[int, Field(ge=0, le=2**31 - 1)] | None = None
    digest: fields.Digest | None = None
    source: BootSource | None = None
    booted_at: fields.Time | None = None
    age_s: Annotated[float, Field(ge=0, le=1e10, description="Age of what was loaded")] | None = None
    software: fields.Label = None

    def statement(self) -> BootStatement:
        """The same as the record takes it."""
        return BootStatement(
            calibration_number=self.calibration_number,
            digest=self.digest,
            source=self.source,
            booted_at=self.booted_at,
            age_s=self.age_s,
            software=self.software,
        )


class BootAnswer(Answer):
    """A boot on the record. `matched`: what was loaded was in force, or had been within the grace of a day."""

    boot_id: str
    vehicle_id: str
    calibration_id: str | None
    calibration_number: int | None
    digest: str | None
    source: BootSource | None
    booted_at: fields.Time
    age_s: float | None
    software: str | None
    matched: bool
    recorded_at: fields.Time


def described(boot: Boot) -> Described:
    """A boot as the doors write it."""
    return {
        **vars(boot.statement),
        "boot_id": boot.boot_id,
        "vehicle_id": boot.vehicle_id,
        "calibration_id": boot.calibration_id,
        "booted_at": fields.instant(boot.booted_at),
        "matched": boot.matched,
        "recorded_at": fields.instant(boot.recorded_at),
    }


@doors.post("/vehicles/<vehicle_id>/boots", responses={201: BootAnswer})
@needs("technician", own_vehicle=True)
def post_boot(path: VehiclePath, body: BootBody) -> Response:
    """Report a boot. What was not in force then raises an alert at once, with a grace of a day."""
    return reply(described(report_boot(services(), actor(), path.vehicle_id, body.statement())), 201)
