"""Parameters: what a vehicle is to load at boot, now or as of any past time."""

from __future__ import annotations

import hashlib
from typing import Annotated, Any, Literal

from flask import Response, request
from pydantic import ConfigDict, Field
from werkzeug.datastructures import Headers

from registry.api import fields, keys
from registry.api.bodies import Answer, Query, VehiclePath
from registry.api.document import refused, resource
from registry.api.keys import needs, services
from registry.domain.boot import BootSheet, Condition
from registry.procedures import boot

doors = resource("parameters")

_LINES = "text/plain"
#: A copy may be kept by who asked, and is asked about each time.
_KEPT = (("Cache-Control", "private, no-cache"), ("Vary", "Accept, Authorization"))
_TAGGED: dict[str, Any] = {"ETag": {"description": "Changes with any byte of the answer", "schema": {"type": "string"}}}


class ParametersQuery(Query):
    """Without either: what to load now."""

    at: Annotated[fields.Time | None, Field(description="What was in force at this time")] = None
    known_at: Annotated[fields.Time | None, Field(description="As far as had been recorded by this time")] = None


class UncertaintyAnswer(Answer):
    """Standard uncertainties."""

    left_mm_per_tick: float
    right_mm_per_tick: float
    width_mm: float


class ParametersAnswer(Answer):
    """What to load. `digest` and `tag` let the vehicle check that nothing was changed and that it is its own."""

    model_config = ConfigDict(
        openapi_extra={  # type: ignore[typeddict-unknown-key]  # read by the framework, not by pydantic
            "description": "What to load, as JSON or as lines NAME=VALUE",
            "headers": _TAGGED,
            "content": {_LINES: {"schema": {"type": "string"}}},
        }
    )

    vehicle_id: str
    calibration_number: int
    in_force_from: fields.Time
    left_mm_per_tick: float
    right_mm_per_tick: float
    width_mm: float
    u: UncertaintyAnswer
    counting: dict[str, str | int | float | bool | None]
    condition: Condition
    reasons: list[str]
    digest: str
    tag: str


_UNCHANGED: dict[str, Any] = {"description": "The answer named in If-None-Match still holds", "headers": _TAGGED}


@doors.get("/vehicles/<vehicle_id>/parameters", responses={200: ParametersAnswer, 304: _UNCHANGED, **refused(404)})
@needs("reader", own_vehicle=True, gated=False)
def get_parameters(path: VehiclePath, query: ParametersQuery) -> Response:
    """What a vehicle is to load at boot.

    With `at` what was in force then, with `known_at` as far as had been recorded by then. `Accept: text/plain` gives
    lines. When nothing is in force the answer is 404 `/problems/nothing-in-force` with `withdrawn_numbers`.
    """
    key = keys.key()
    if query.at is None and query.known_at is None:
        sheet, key32 = boot.fetch(services(), key, path.vehicle_id)
    else:
        actor = keys.actor_of(key)
        sheet = boot.parameters(services(), actor, path.vehicle_id, query.at, query.known_at)
        key32 = hashlib.sha256(key.encode()).digest()
    return _written(sheet, key32)


def _written(sheet: BootSheet, key32: bytes) -> Response:
    """The sheet in the form that was asked for, or 304 when the asker has it."""
    form = _form()
    if form == _LINES:
        body = boot.render_lines(sheet, key32)
        etag = boot.etag_of(body)
    else:
        body, etag = boot.render(sheet, key32)
    headers = Headers([("ETag", f'"{etag}"'), *_KEPT])
    if "If-None-Match" in request.headers and request.if_none_match.contains_weak(etag):
        return Response(status=304, headers=headers)
    return Response(body, mimetype=form, headers=headers)


def _form() -> Literal["application/json", "text/plain"]:
    """JSON, unless lines are asked for more than it. The plain cases are told without weighing."""
    asked = request.headers.get("Accept", "*/*")
    if asked in ("*/*", "application/json"):
        return "application/json"
    if asked == _LINES or request.accept_mimetypes.best_match(("application/json", _LINES)) == _LINES:
        return "text/plain"
    return "application/json"
