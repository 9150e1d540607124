"""The application: a list of registrations. It starts no thread and opens no connection."""

from __future__ import annotations

from flask import Flask, request
from werkzeug.wrappers import Response

from registry.api import document, doors, problems
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
    doors.register(app, services)
    pages.register(app, services)
    app.register_error_handler(Exception, _answer)
    return app


def _answer(error: Exception) -> Response:
    """One answer for whatever went wrong, by who is asking: only here are paths that no door has seen too."""
    return problems.answer(error) if problems.is_for_machines(request.path) else refusals.answer(error)
