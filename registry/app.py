"""The application: a list of registrations. It starts no thread and opens no connection."""

from __future__ import annotations

from http import HTTPStatus
from typing import cast

from flask import Flask, Request, request
from flask.sessions import SecureCookieSession, SecureCookieSessionInterface
from werkzeug.wrappers import Response

from registry.api import document, doors, problems
from registry.api.strict_json import StrictRequest
from registry.services import Services
from registry.web import pages, refusals


def create_app(services: Services) -> Flask:
    """
    The API for machines and the pages for people, behind one address.

    Parameters
    ----------
    services
        What everything works with; passed on to every room.
    """
    app = document.make_app("registry", static_folder=None)
    app.session_interface = _PageSessions()
    doors.register(app, services)
    pages.register(app, services)
    app.register_error_handler(Exception, _answer)
    app.after_request(_drained)
    return app


class _PageSessions(SecureCookieSessionInterface):
    """Pages have a session in a cookie; machines bring their key each time, and their answers vary with no cookie."""

    def open_session(self, app: Flask, request: Request) -> SecureCookieSession | None:
        if problems.is_for_machines(request.path):
            return self.make_null_session(app)
        return super().open_session(app, request)


def _drained(response: Response) -> Response:
    """A body that is refused for its length is taken off the line first, so that its sender hears the refusal."""
    if response.status_code == HTTPStatus.REQUEST_ENTITY_TOO_LARGE:
        cast(StrictRequest, request).drain()
    return response


def _answer(error: Exception) -> Response:
    """One answer for whatever went wrong, by who is asking: only here are paths that no door has seen too."""
    return problems.answer(error) if problems.is_for_machines(request.path) else refusals.answer(error)
