"""Runs: logged drives with a known end."""

from __future__ import annotations

from typing import Annotated, cast

from flask import Response, request
from pydantic import Field

from registry.api import bodies, fields
from registry.api.bodies import Answer, Body, Described, PageAnswer, PageQuery, RunPath, VehiclePath, reply
from registry.api.document import CONFLICTS, resource
from registry.api.keys import actor, needs, services
from registry.api.strict_json import StrictRequest
from registry.domain.run import ClosureStatement, Conditions, Run, Use
from registry.procedures import intake
from registry.procedures.intake import RunStatement
from registry.storage import runs as stored
from registry.storage import vehicles

doors = resource("runs")


class ClosureBody(Body):
    """Where the run truly ended, in the frame of its start pose; at least one of x, y, heading and distance."""

    x_mm: fields.Mm | None = None
    y_mm: fields.Mm | None = None
    heading_deg: fields.Deg | None = None
    distance_mm: Annotated[float, Field(ge=0, le=1e9)] | None = None
    turns: Annotated[int, Field(ge=-100_000, le=100_000, description="Signed whole turns, counted")] | None = None
    position_sd_mm: fields.PositiveMm | None = None
    heading_sd_deg: fields.PositiveDeg | None = None

    def statement(self) -> ClosureStatement:
        """The same in SI."""
        return ClosureStatement(
            x_m=fields.metres(self.x_mm),
            y_m=fields.metres(self.y_mm),
            heading_rad=fields.radians(self.heading_deg),
            distance_m=fields.metres(self.distance_mm),
            turns=self.turns,
            position_sd_m=fields.metres(self.position_sd_mm),
            heading_sd_rad=fields.radians(self.heading_sd_deg),
        )


class RunBody(Body):
    """A run as it was logged, with what was noted about the drive."""

    run_key: fields.RunKey
    started_at: fields.Time
    time_s: fields.Times
    left_counts: fields.Counts
    right_counts: fields.Counts
    closure: ClosureBody
    start_mark: fields.Label = None
    end_mark: fields.Label = None
    course: fields.Label = None
    surface: fields.Label = None
    load_kg: Annotated[float, Field(ge=0, le=1e6)] | None = None
    driven_by: fields.Label = None
    read_by: fields.Label = None
    instrument: fields.Label = None
    note: fields.Note = None

    def conditions(self) -> Conditions:
        """What was noted about the drive."""
        return Conditions(
            start_mark=self.start_mark,
            end_mark=self.end_mark,
            course=self.course,
            surface=self.surface,
            load_kg=self.load_kg,
            driven_by=self.driven_by,
            read_by=self.read_by,
            instrument=self.instrument,
            note=self.note,
        )

    def statement(self) -> RunStatement:
        """The same in SI, with the identity of the whole of it."""
        statement = RunStatement(
            run_key=self.run_key,
            started_at=self.started_at,
            time_s=self.time_s,
            left_counts=self.left_counts,
            right_counts=self.right_counts,
            closure=self.closure.statement(),
            conditions=self.conditions(),
            content_digest="",
        )
        return intake.sealed(statement)


class ReasonBody(Body):
    """Why."""

    reason: fields.Reason


class RunAnswer(Answer):
    """A run on the record."""

    run_id: str
    run_key: str
    vehicle_id: str
    use: Use
    reasons: list[str]
    started_at: fields.Time
    duration_s: float
    samples: int
    distance_mm: float
    turned_deg: float
    closure: bodies.ClosureAnswer
    misclosure: bodies.MisclosureAnswer | None
    start_mark: str | None
    end_mark: str | None
    course: str | None
    surface: str | None
    load_kg: float | None
    driven_by: str | None
    read_by: str | None
    instrument: str | None
    note: str | None
    recorded_at: fields.Time
    recorded_by: str


def described(run: Run) -> Described:
    """A run as the doors write it."""
    return {
        "run_id": run.run_id,
        "run_key": run.run_key,
        "vehicle_id": run.vehicle_id,
        "use": run.use,
        "reasons": list(run.reasons),
        "started_at": fields.instant(run.started_at),
        "duration_s": fields.rounded(run.duration_s),
        "samples": run.samples,
        "distance_mm": fields.mm(run.distance_m),
        "turned_deg": fields.deg(run.turned_rad),
        "closure": bodies.closure(run.closure),
        "misclosure": bodies.misclosure(run.misclosure),
        **vars(run.conditions),
        "recorded_at": fields.instant(run.recorded_at),
        "recorded_by": run.recorded_by,
    }


@doors.post("/vehicles/<vehicle_id>/runs", responses={200: RunAnswer, 201: RunAnswer, **CONFLICTS})
@needs("technician", own_vehicle=True)
def post_run(path: VehiclePath, body: RunBody) -> Response:
    """Hand in a run.

    The same key with the same content again answers 200, with other content 409. A run that is well-formed but cannot
    be used is kept `set aside`, with the reasons.
    """
    cast(StrictRequest, request).take_json()  # The tree of a long run is large; its arrays are all that is needed now.
    run, created = intake.take_run(services(), actor(), path.vehicle_id, body.statement())
    return reply(described(run), 201 if created else 200)


@doors.get("/vehicles/<vehicle_id>/runs", responses={200: PageAnswer[RunAnswer]})
@needs("reader")
def list_runs(path: VehiclePath, query: PageQuery) -> Response:
    """A vehicle's runs, the one driven last first."""
    with services().read() as c:
        vehicles.current(c, path.vehicle_id)
        page = stored.page(c, path.vehicle_id, query.limit, query.after)
    return bodies.reply_page(page, described)


@doors.get("/runs/<run_id>", responses={200: RunAnswer})
@needs("reader")
def get_run(path: RunPath) -> Response:
    """A run."""
    with services().read() as c:
        return reply(described(stored.by_id(c, path.run_id)))


@doors.post("/runs/<run_id>/set-aside", responses={200: RunAnswer, **CONFLICTS})
@needs("technician")
def post_set_aside(path: RunPath, body: ReasonBody) -> Response:
    """Set a run aside: technicians their own, approvers any."""
    return reply(described(intake.set_aside(services(), actor(), path.run_id, body.reason)))


@doors.post("/runs/<run_id>/restoration", responses={200: RunAnswer, **CONFLICTS})
@needs("approver")
def post_restoration(path: RunPath, body: ReasonBody) -> Response:
    """Let a run be used again."""
    return reply(described(intake.restore(services(), actor(), path.run_id, body.reason)))
