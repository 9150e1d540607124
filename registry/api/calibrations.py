"""Calibrations: proposed, put into force, withdrawn."""

from __future__ import annotations

from typing import Annotated, Literal

from flask import Response
from pydantic import Field, model_validator

from registry.api import bodies, calibration_answers, fields
from registry.api.bodies import Body, CalibrationPath, PageAnswer, PageQuery, VehiclePath, reply
from registry.api.calibration_answers import CalibrationAnswer, WithdrawalAnswer, described
from registry.api.document import CONFLICTS, resource
from registry.api.keys import actor, needs, services
from registry.domain.vehicle import Parameters
from registry.errors import FieldError, Invalid
from registry.procedures import adoption, baseline
from registry.storage import calibrations as stored
from registry.storage import vehicles

doors = resource("calibrations")

_ENTERED = ("left_mm_per_tick", "right_mm_per_tick", "width_mm", "u")


class UncertaintyBody(Body):
    """Standard uncertainties of entered values."""

    left_mm_per_tick: fields.MmPerTick
    right_mm_per_tick: fields.MmPerTick
    width_mm: fields.PositiveMm


class CalibrationBody(Body):
    """Either a baseline from runs, or values that were entered.

    Kind `baseline` takes `run_ids` (null: all usable runs since the last maintenance that ends the window); kinds
    `entered` and `provisional` take the three values and their standard uncertainties `u`, all of them.
    """

    kind: Literal["baseline", "entered", "provisional"]
    run_ids: Annotated[list[fields.Token], Field(max_length=10_000)] | None = None
    left_mm_per_tick: fields.MmPerTick | None = None
    right_mm_per_tick: fields.MmPerTick | None = None
    width_mm: fields.PositiveMm | None = None
    u: UncertaintyBody | None = None
    note: fields.Note = None

    @model_validator(mode="after")
    def _fields_of_its_kind(self) -> CalibrationBody:
        if self.kind == "baseline":
            wrong = [name for name in _ENTERED if name in self.model_fields_set]
            detail = "is not a field of a baseline, which comes from runs: remove it"
        else:
            wrong = [name for name in _ENTERED if getattr(self, name) is None]
            detail = f"is missing: {self.kind} values are given in full, with their uncertainties"
            if "run_ids" in self.model_fields_set:
                wrong, detail = ["run_ids"], f"is not a field of {self.kind} values: remove it"
        if wrong:
            raise Invalid(f"/{wrong[0]} {detail}", tuple(FieldError(f"/{name}", detail) for name in wrong))
        return self


class AdoptionBody(Body):
    """Why, from when (default now, in whole seconds) and, as a check, the calibration's own number."""

    reason: fields.Reason
    in_force_from: fields.Time | None = None
    number: Annotated[int, Field(ge=1, le=2**31)] | None = None


class WithdrawalBody(Body):
    """Why, and what holds next: an earlier calibration's numbers, or nothing."""

    reason: fields.Reason
    then: Literal["reinstate", "nothing"]
    number: Annotated[int, Field(ge=1, le=2**31, description="Which one to reinstate")] | None = None


@doors.post("/vehicles/<vehicle_id>/calibrations", responses={201: CalibrationAnswer, **CONFLICTS})
@needs("technician")
def post_calibration(path: VehiclePath, body: CalibrationBody) -> Response:
    """Propose a calibration.

    A baseline whose runs do not determine every quantity, and for which nothing in force supplies it, is refused with
    `/problems/not-observed`, one error a quantity that names the run that would settle it.
    """
    if body.kind == "baseline":
        run_ids = None if body.run_ids is None else tuple(body.run_ids)
        made = baseline.propose_baseline(services(), actor(), path.vehicle_id, run_ids, body.note)
    else:
        values, u_m = _entered(body)
        made = baseline.propose_entered(services(), actor(), path.vehicle_id, body.kind, values, u_m, body.note)
    return reply(described(made), 201)


def _entered(body: CalibrationBody) -> tuple[Parameters, tuple[float, float, float]]:
    """Entered values and their standard uncertainties in SI; the body's own check saw that all are there."""
    left, right, width, u = body.left_mm_per_tick, body.right_mm_per_tick, body.width_mm, body.u
    if left is None or right is None or width is None or u is None:
        raise TypeError("an entered calibration without its values passed the body's check")
    u_m = (u.left_mm_per_tick / 1e3, u.right_mm_per_tick / 1e3, u.width_mm / 1e3)
    return Parameters(left / 1e3, right / 1e3, width / 1e3), u_m


@doors.get("/vehicles/<vehicle_id>/calibrations", responses={200: PageAnswer[CalibrationAnswer]})
@needs("reader")
def list_calibrations(path: VehiclePath, query: PageQuery) -> Response:
    """A vehicle's calibrations, the highest number first."""
    with services().read() as c:
        vehicles.current(c, path.vehicle_id)
        page = stored.page(c, path.vehicle_id, query.limit, query.after)
    return bodies.reply_page(page, described)


@doors.get("/calibrations/<calibration_id>", responses={200: CalibrationAnswer})
@needs("reader")
def get_calibration(path: CalibrationPath) -> Response:
    """A calibration."""
    with services().read() as c:
        return reply(described(stored.by_id(c, path.calibration_id)))


@doors.post("/calibrations/<calibration_id>/adoption", responses={200: CalibrationAnswer, **CONFLICTS})
@needs("approver")
def post_adoption(path: CalibrationPath, body: AdoptionBody) -> Response:
    """Put a calibration into force.

    Answers 409 when another came into force since it was proposed. A time earlier than now is marked entered late.
    """
    made = adoption.adopt(services(), actor(), path.calibration_id, body.reason, body.in_force_from, body.number)
    return reply(described(made))


@doors.post("/calibrations/<calibration_id>/withdrawal", responses={200: WithdrawalAnswer, **CONFLICTS})
@needs("approver")
def post_withdrawal(path: CalibrationPath, body: WithdrawalBody) -> Response:
    """Take a calibration back, saying what holds next; the answer names the vehicles that had loaded it."""
    done = adoption.withdraw(services(), actor(), path.calibration_id, body.reason, body.then, body.number)
    return reply(calibration_answers.withdrawn(done))
