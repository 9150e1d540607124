"""What is refused, as problem documents (RFC 9457): one table from the class of a refusal to its status and type."""

from __future__ import annotations

import traceback
from collections.abc import Iterable
from http import HTTPStatus
from typing import Any

import orjson
import structlog
from flask import Response, request
from pydantic import BaseModel, ConfigDict, Field, ValidationError
from werkzeug.exceptions import HTTPException
from werkzeug.wrappers import Response as BaseResponse

from registry.api.strict_json import escaped
from registry.errors import (
    Conflict,
    FieldError,
    Invalid,
    Malformed,
    NotAllowed,
    NotFound,
    NothingInForce,
    NotObserved,
    NotSignedIn,
    PreconditionFailed,
    PreconditionRequired,
    Refusal,
    TooLarge,
    Unready,
)

MEDIA_TYPE = "application/problem+json"
API_PREFIX = "/api/"
#: Paths outside the API that machines read too.
MACHINE_PATHS = frozenset({"/healthz", "/readyz"})

#: class → (status, problem type, title). The class of a refusal or its nearest base counts.
TABLE: dict[type[Refusal], tuple[HTTPStatus, str, str]] = {
    Malformed: (HTTPStatus.BAD_REQUEST, "malformed", "The body cannot be read"),
    NotSignedIn: (HTTPStatus.UNAUTHORIZED, "no-valid-key", "No valid key"),
    NotAllowed: (HTTPStatus.FORBIDDEN, "not-allowed", "This key may not do that"),
    NotFound: (HTTPStatus.NOT_FOUND, "not-found", "Not on the record"),
    NothingInForce: (HTTPStatus.NOT_FOUND, "nothing-in-force", "Nothing is in force"),
    Conflict: (HTTPStatus.CONFLICT, "conflict", "The record says otherwise"),
    PreconditionFailed: (
        HTTPStatus.PRECONDITION_FAILED,
        "precondition-failed",
        "The version named is not the current one",
    ),
    TooLarge: (HTTPStatus.REQUEST_ENTITY_TOO_LARGE, "too-large", "More than this door takes"),
    Invalid: (HTTPStatus.UNPROCESSABLE_ENTITY, "invalid", "The content is wrong"),
    NotObserved: (HTTPStatus.UNPROCESSABLE_ENTITY, "not-observed", "The runs do not determine it"),
    PreconditionRequired: (HTTPStatus.PRECONDITION_REQUIRED, "precondition-required", "Name the version you saw"),
    Unready: (HTTPStatus.SERVICE_UNAVAILABLE, "unready", "Not ready"),
}

#: What pydantic calls an error → how it is said here. Others keep pydantic's own sentence.
_REMEDIES = {
    "extra_forbidden": "is not a field of this door: remove it",
    "missing": "is missing: give it",
    "finite_number": "must be a finite number",
    "float_type": "must be a number",
    "int_type": "must be a whole number",
    "string_type": "must be a text",
    "dict_type": "must be a JSON object",
    "model_type": "must be a JSON object",
    "model_attributes_type": "must be a JSON object",
    "list_type": "must be a list",
}

_log = structlog.get_logger("registry.api")


class FieldProblem(BaseModel):
    """One field that is wrong."""

    pointer: str = Field(description="JSON pointer into the body, or / and the name of a path or query parameter")
    detail: str = Field(description="What is wrong with it and what to do")


class Problem(BaseModel):
    """A problem document (RFC 9457)."""

    model_config = ConfigDict(extra="allow")

    type: str = Field(description="Relative reference that names the kind of problem, such as /problems/not-observed")
    title: str
    status: int
    detail: str = Field(description="A sentence that says what to do")
    errors: list[FieldProblem] = Field(default=[], description="The fields that are wrong, where there are any")
    withdrawn_numbers: list[int] = Field(
        default=[], description="With /problems/nothing-in-force: never fall back to these"
    )


def is_for_machines(path: str) -> bool:
    """Whether errors at this path are answered as problem documents."""
    return path.startswith(API_PREFIX) or path in MACHINE_PATHS


def answer(error: Exception) -> BaseResponse:
    """
    Turn whatever went wrong into a problem document.

    Parameters
    ----------
    error
        A refusal, an HTTP exception (its headers are kept; redirects pass as they are), or a fault of the program,
        which is logged and of which nothing is told.

    Returns
    -------
    Response
        ``application/problem+json``.
    """
    if isinstance(error, Refusal):
        return _of_refusal(error)
    if isinstance(error, HTTPException):
        return _of_http(error)
    # Written out here, because a log that prints local variables too would print keys.
    told = "".join(traceback.format_exception(error))
    _log.error("request failed", method=request.method, path=request.path, exception=told)
    return _document(
        HTTPStatus.INTERNAL_SERVER_ERROR, "fault", "A fault of the program", "It has been logged. Try again."
    )


def invalid(error: ValidationError) -> Invalid:
    """
    Say what a pydantic model found wrong, field by field.

    Parameters
    ----------
    error
        From any body, query or path model.

    Returns
    -------
    Invalid
        At most twenty fields, each with its pointer.
    """
    found = error.errors(include_url=False, include_input=False)[:20]
    errors = tuple(FieldError(_pointer(one), _REMEDIES.get(one["type"], one["msg"])) for one in found)
    return Invalid(f"{errors[0].pointer or 'the body'} {errors[0].detail}", errors)


def _pointer(one: Any) -> str:
    steps: list[object] = list(one["loc"])
    if one["type"] == "sample":
        steps.append(one["ctx"]["index"])
    return "".join(f"/{escaped(step)}" for step in steps)


def _of_refusal(error: Refusal) -> BaseResponse:
    kind = next(known for known in type(error).__mro__ if known in TABLE)
    status, slug, title = TABLE[kind]
    more: dict[str, Any] = {}
    if isinstance(error, Unready):
        _log.warning("not ready", path=request.path, detail=error.detail, cause=repr(error.__cause__))
    if isinstance(error, NothingInForce):
        more["withdrawn_numbers"] = list(error.withdrawn_numbers)
    response = _document(status, slug, title, error.detail, error.errors, more)
    if status is HTTPStatus.UNAUTHORIZED:
        response.headers["WWW-Authenticate"] = 'Bearer realm="rollbook"'
    return response


def _of_http(error: HTTPException) -> BaseResponse:
    if error.response is not None or error.code is None or error.code < 400:
        return error.get_response()
    status = HTTPStatus(error.code)
    slug = status.phrase.lower().replace(" ", "-")
    detail = _HTTP_DETAILS.get(status) or error.description or status.description
    response = _document(status, slug, status.phrase, detail)
    for name, value in error.get_headers():
        if name.lower() not in ("content-type", "content-length"):
            response.headers[name] = value
    return response


_HTTP_DETAILS = {
    HTTPStatus.NOT_FOUND: "There is no such path: see /api/v1/docs.",
    HTTPStatus.METHOD_NOT_ALLOWED: "The path is there, but not for this method: see the header Allow.",
    HTTPStatus.REQUEST_ENTITY_TOO_LARGE: "The body is larger than 16 MB: gzip it, or send shorter runs.",
}


def _document(
    status: HTTPStatus,
    slug: str,
    title: str,
    detail: str,
    errors: Iterable[FieldError] = (),
    more: dict[str, Any] | None = None,
) -> Response:
    content: dict[str, Any] = {
        "type": f"/problems/{slug}",
        "title": title,
        "status": int(status),
        "detail": detail,
        "errors": [{"pointer": one.pointer, "detail": one.detail} for one in errors],
        **(more or {}),
    }
    return Response(orjson.dumps(content), status=int(status), mimetype=MEDIA_TYPE)
