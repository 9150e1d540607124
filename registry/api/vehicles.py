"""Vehicles: their statements, dated versions and how each stands."""

from __future__ import annotations

from typing import Annotated

from flask import Response, request
from pydantic import Field

from registry.api import fields, overview
from registry.api.bodies import Answer, Body, Described, PageAnswer, PageQuery, VehiclePath, reply
from registry.api.document import PRECONDITIONS, resource
from registry.api.keys import actor, needs, services
from registry.domain.tolerance import Tolerance
from registry.domain.vehicle import Drive, Parameters, ReferencePoint, VehicleStatement, VehicleVersion
from registry.errors import FieldError, Invalid, PreconditionFailed
from registry.procedures import registration
from registry.storage import vehicles as stored

doors = resource("vehicles")

_TOLERANCE = Tolerance()


class NominalBody(Body):
    """The values that a ruler and a data sheet give."""

    left_mm_per_tick: fields.MmPerTick
    right_mm_per_tick: fields.MmPerTick
    width_mm: fields.PositiveMm


class ReferencePointBody(Body):
    """The mark on the chassis that is measured, from the middle of the axle."""

    ahead_mm: fields.Mm = 0.0
    left_mm: fields.Mm = 0.0


class ToleranceBody(Body):
    """How far each watched quantity may move, half-width."""

    tick_factor_percent: fields.PositivePercent = fields.rounded(_TOLERANCE.tick_factor * 100)
    side_ratio_percent: fields.PositivePercent = fields.rounded(_TOLERANCE.side_ratio * 100)
    width_percent: fields.PositivePercent = fields.rounded(_TOLERANCE.width * 100)


class VehicleBody(Body):
    """A vehicle as a person states it; `vehicle_id` may repeat that of the path, so that one file serves every door."""

    vehicle_id: fields.VehicleId | None = None
    name: fields.Name
    drive: Drive
    site: fields.Label = None
    serial: fields.Label = None
    nominal: NominalBody
    counter_bits: Annotated[int, Field(ge=8, le=63, description="Width of the tick counters")] = 32
    max_speed_mm_per_s: Annotated[float, Field(gt=1e-3, le=1e6, description="Faster is not believed")]
    reference_point: ReferencePointBody = ReferencePointBody()
    tolerance: ToleranceBody = ToleranceBody()

    def statement(self) -> VehicleStatement:
        """The same in SI."""
        nominal, point, tolerance = self.nominal, self.reference_point, self.tolerance
        return VehicleStatement(
            name=self.name,
            drive=self.drive,
            nominal=Parameters(nominal.left_mm_per_tick / 1e3, nominal.right_mm_per_tick / 1e3, nominal.width_mm / 1e3),
            max_speed_m_per_s=self.max_speed_mm_per_s / 1e3,
            site=self.site,
            serial=self.serial,
            counter_bits=self.counter_bits,
            reference_point=ReferencePoint(point.ahead_mm / 1e3, point.left_mm / 1e3),
            tolerance=Tolerance(
                tolerance.tick_factor_percent / 1e2,
                tolerance.side_ratio_percent / 1e2,
                tolerance.width_percent / 1e2,
            ),
        )


class NominalAnswer(Answer):
    """Nominal values."""

    left_mm_per_tick: float
    right_mm_per_tick: float
    width_mm: float


class ReferencePointAnswer(Answer):
    """Reference point."""

    ahead_mm: float
    left_mm: float


class ToleranceAnswer(Answer):
    """Tolerance, half-widths."""

    tick_factor_percent: float
    side_ratio_percent: float
    width_percent: float


class VehicleAnswer(Answer):
    """A vehicle as it stands: its newest version."""

    vehicle_id: str
    name: str
    drive: Drive
    site: str | None
    serial: str | None
    nominal: NominalAnswer
    counter_bits: int
    max_speed_mm_per_s: float
    reference_point: ReferencePointAnswer
    tolerance: ToleranceAnswer
    version: int
    valid_from: fields.Time | None
    recorded_at: fields.Time
    recorded_by: str


class VehicleWithOverview(VehicleAnswer):
    """A vehicle and how it stands."""

    overview: overview.OverviewAnswer


def described(version: VehicleVersion) -> Described:
    """A vehicle as the doors write it."""
    statement = version.statement
    nominal, point, tolerance = statement.nominal, statement.reference_point, statement.tolerance
    return {
        "vehicle_id": version.vehicle_id,
        "name": statement.name,
        "drive": statement.drive,
        "site": statement.site,
        "serial": statement.serial,
        "nominal": {
            "left_mm_per_tick": fields.mm(nominal.left_m_per_tick),
            "right_mm_per_tick": fields.mm(nominal.right_m_per_tick),
            "width_mm": fields.mm(nominal.width_m),
        },
        "counter_bits": statement.counter_bits,
        "max_speed_mm_per_s": fields.mm(statement.max_speed_m_per_s),
        "reference_point": {"ahead_mm": fields.mm(point.ahead_m), "left_mm": fields.mm(point.left_m)},
        "tolerance": {
            "tick_factor_percent": fields.percent(tolerance.tick_factor),
            "side_ratio_percent": fields.percent(tolerance.side_ratio),
            "width_percent": fields.percent(tolerance.width),
        },
        "version": version.version,
        "valid_from": fields.instant(version.valid_from),
        "recorded_at": fields.instant(version.recorded_at),
        "recorded_by": version.recorded_by,
    }


@doors.put("/vehicles/<vehicle_id>", responses={200: VehicleAnswer, 201: VehicleAnswer, **PRECONDITIONS})
@needs("approver")
def put_vehicle(path: VehiclePath, body: VehicleBody) -> Response:
    """Register a vehicle, or state it anew.

    The same statement again answers 200. Other values for a known vehicle need `If-Match` with the `ETag` that was
    seen (428 without it, 412 with a stale one) and make a new dated version; old runs keep theirs.
    """
    if body.vehicle_id not in (None, path.vehicle_id):
        detail = f"is {body.vehicle_id!r}, but the path names {path.vehicle_id!r}: make them agree, or leave it out"
        raise Invalid(f"vehicle_id {detail}", (FieldError("/vehicle_id", detail),))
    version, created = registration.put_vehicle(services(), actor(), path.vehicle_id, body.statement(), _seen())
    return reply(described(version), 201 if created else 200, version.statement.etag())


def _seen() -> str | None:
    """
    The one version that the caller says to have seen; None when it names none.

    Raises
    ------
    PreconditionFailed
        When several are named: a statement follows from one.
    """
    if "If-Match" not in request.headers:
        return None
    if request.if_match.star_tag:
        return "*"
    tags = request.if_match.as_set()
    if len(tags) != 1:
        raise PreconditionFailed("If-Match must name one strong ETag, in quotes, as GET answers it")
    return str(tags.pop())


@doors.get("/vehicles", responses={200: PageAnswer[VehicleWithOverview]})
@needs("reader")
def list_vehicles(query: PageQuery) -> Response:
    """The fleet, each vehicle with its overview."""
    with services().read() as c:
        page = stored.page(c, query.limit, query.after)
        standing = overview.of_fleet(c, page.items)
    items = [described(version) | {"overview": standing[version.vehicle_id]} for version in page.items]
    return reply({"items": items, "after": page.after})


@doors.get("/vehicles/<vehicle_id>", responses={200: VehicleWithOverview})
@needs("reader")
def get_vehicle(path: VehiclePath) -> Response:
    """A vehicle with its overview; its ETag is what a new statement must name."""
    with services().read() as c:
        version = stored.current(c, path.vehicle_id)
        standing = overview.of_vehicle(c, version)
    return reply(described(version) | {"overview": standing}, etag=version.statement.etag())
