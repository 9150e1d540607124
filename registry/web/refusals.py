"""What is refused, as a page for a person: one sentence that says what is wrong, and where to go on."""

from __future__ import annotations

import traceback
from http import HTTPStatus

import structlog
from flask import Response, make_response, render_template, request
from werkzeug.exceptions import HTTPException
from werkzeug.wrappers import Response as BaseResponse

from registry.errors import (
    Conflict,
    Malformed,
    NotAllowed,
    NotFound,
    NothingInForce,
    NotSignedIn,
    Refusal,
    TooLarge,
    Unready,
)
from registry.web.current import forget_person
from registry.web.policy import guarded

STATUS: dict[type[Refusal], HTTPStatus] = {
    Malformed: HTTPStatus.BAD_REQUEST,
    NotSignedIn: HTTPStatus.UNAUTHORIZED,
    NotAllowed: HTTPStatus.FORBIDDEN,
    NotFound: HTTPStatus.NOT_FOUND,
    NothingInForce: HTTPStatus.NOT_FOUND,
    Conflict: HTTPStatus.CONFLICT,
    TooLarge: HTTPStatus.REQUEST_ENTITY_TOO_LARGE,
    Unready: HTTPStatus.SERVICE_UNAVAILABLE,
    Refusal: HTTPStatus.UNPROCESSABLE_ENTITY,
}

TITLES: dict[HTTPStatus, str] = {
    HTTPStatus.BAD_REQUEST: "That could not be read",
    HTTPStatus.UNAUTHORIZED: "Sign in first",
    HTTPStatus.FORBIDDEN: "Not for your role",
    HTTPStatus.NOT_FOUND: "Not in the book",
    HTTPStatus.METHOD_NOT_ALLOWED: "Not that way",
    HTTPStatus.CONFLICT: "The record says otherwise",
    HTTPStatus.REQUEST_ENTITY_TOO_LARGE: "Too large",
    HTTPStatus.UNPROCESSABLE_ENTITY: "That does not fit",
    HTTPStatus.TOO_MANY_REQUESTS: "Too many tries",
    HTTPStatus.SERVICE_UNAVAILABLE: "Not ready",
}

DETAILS: dict[HTTPStatus, str] = {
    HTTPStatus.NOT_FOUND: "There is no page at this address.",
    HTTPStatus.METHOD_NOT_ALLOWED: "This address answers another kind of request: go back and use the form.",
}

_log = structlog.get_logger("registry.web")


def status_of(refusal: Refusal) -> HTTPStatus:
    """The HTTP status that a refusal is answered with."""
    return next(STATUS[known] for known in type(refusal).__mro__ if known in STATUS)


def answer(error: Exception) -> BaseResponse:
    """The page for whatever went wrong; a fault of the program is logged and nothing of it is told.

    Parameters
    ----------
    error
        A refusal, an HTTP exception (its headers are kept, redirects pass as they are), or a fault.
    """
    if isinstance(error, Refusal):
        return _page(status_of(error), error.detail)
    if isinstance(error, HTTPException):
        if error.response is not None or error.code is None or error.code < HTTPStatus.BAD_REQUEST:
            return error.get_response()
        status = HTTPStatus(error.code)
        response = _page(status, DETAILS.get(status) or error.description or status.description)
        for name, value in error.get_headers():
            if name.lower() not in ("content-type", "content-length"):
                response.headers[name] = value
        return response
    # Written out here, because a log that prints local variables too would print passwords.
    told = "".join(traceback.format_exception(error))
    _log.error("page failed", method=request.method, path=request.path, exception=told)
    return _page(HTTPStatus.INTERNAL_SERVER_ERROR, "A fault of the program. It has been logged; try again.")


def _page(status: HTTPStatus, detail: str) -> Response:
    if status >= HTTPStatus.INTERNAL_SERVER_ERROR:
        forget_person()
    title = TITLES.get(status, "That did not work")
    return guarded(make_response(render_template("refusal.html", title=title, detail=detail), status))
