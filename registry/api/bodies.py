"""What every body, query and answer has in common, and the pieces that several resources share."""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated, Any, Generic, Literal, TypeVar

import orjson
from flask import Response
from pydantic import BaseModel, ConfigDict, Field

from registry.api import fields
from registry.domain.run import ClosureStatement, Misclosure
from registry.storage.pages import Page

_T = TypeVar("_T")

Described = dict[str, Any]


class Body(BaseModel):
    """A JSON body: no unknown field, no number for a text, no text for a number, no infinity."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


class Query(BaseModel):
    """Query parameters: none that is unknown. Texts are turned into numbers here, as a URL has only texts."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False, frozen=True)

    @classmethod
    def model_json_schema(cls, *args: Any, **kwargs: Any) -> dict[str, Any]:
        """The schema; the plain one is kept, because the framework asks for it with every request."""
        if args or kwargs:
            return super().model_json_schema(*args, **kwargs)
        kept: dict[str, Any] | None = cls.__dict__.get("_kept_schema")
        if kept is None:
            kept = super().model_json_schema()
            type.__setattr__(cls, "_kept_schema", kept)
        return kept


class Path(BaseModel):
    """Path parameters."""

    model_config = ConfigDict(frozen=True)


class PageQuery(Query):
    """Which part of a collection, newest first."""

    limit: Annotated[int, Field(ge=1, le=1000, description="How many items at most")] = 100
    after: Annotated[fields.Token | None, Field(description="The token `after` of the page before")] = None


class VehiclePath(Path):
    """A vehicle."""

    vehicle_id: fields.VehicleId


class CalibrationPath(Path):
    """A calibration."""

    calibration_id: fields.Token


class RunPath(Path):
    """A run."""

    run_id: fields.Token


class Answer(BaseModel):
    """What a door answers, as the OpenAPI document describes it; the contract tests hold every answer against it."""

    model_config = ConfigDict(extra="forbid")


class ValueWithU(Answer):
    """A value with its standard uncertainty."""

    value: float
    u: float


class ClosureAnswer(Answer):
    """Where a run truly ended, in the frame of its start pose; null is not measured."""

    x_mm: float | None
    y_mm: float | None
    heading_deg: float | None
    distance_mm: float | None
    turns: int | None
    position_sd_mm: float | None
    heading_sd_deg: float | None


class MisclosureAnswer(Answer):
    """Closure minus what the parameters predict; null is not measured."""

    x_mm: float | None
    y_mm: float | None
    heading_deg: float | None
    distance_mm: float | None


class PageAnswer(Answer, Generic[_T]):
    """A page of a collection, newest first; `after` continues it, null at its end."""

    items: list[_T]
    after: str | None


def closure(statement: ClosureStatement) -> Described:
    """A closure as the doors write it."""
    return {
        "x_mm": fields.mm(statement.x_m),
        "y_mm": fields.mm(statement.y_m),
        "heading_deg": fields.deg(statement.heading_rad),
        "distance_mm": fields.mm(statement.distance_m),
        "turns": statement.turns,
        "position_sd_mm": fields.mm(statement.position_sd_m),
        "heading_sd_deg": fields.deg(statement.heading_sd_rad),
    }


def misclosure(error: Misclosure | None) -> Described | None:
    """A misclosure as the doors write it."""
    if error is None:
        return None
    return {
        "x_mm": fields.mm(error.x_m),
        "y_mm": fields.mm(error.y_m),
        "heading_deg": fields.deg(error.heading_rad),
        "distance_mm": fields.mm(error.distance_m),
    }


def value_with_u(value: float, u: float) -> Described:
    """A value with its standard uncertainty, both already in the door's unit."""
    return {"value": fields.rounded(value), "u": fields.rounded(u)}


def reply(content: object, status: Literal[200, 201] = 200, etag: str | None = None) -> Response:
    """
    Write a JSON answer.

    Parameters
    ----------
    content
        Made of dict, list, text, finite numbers, true, false and None.
    status
        200, or 201 when something new stands on the record.
    etag
        Without its quotes.
    """
    response = Response(orjson.dumps(content), status=status, mimetype="application/json")
    if etag is not None:
        response.set_etag(etag)
    return response


def reply_page(page: Page[_T], describe: Callable[[_T], Described]) -> Response:
    """Write a page of a collection."""
    return reply({"items": [describe(item) for item in page.items], "after": page.after})
