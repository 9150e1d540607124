"""All doors of the API, with the gate before them and the document about them."""

from __future__ import annotations

from flask import Response, request
from flask_openapi3.openapi import OpenAPI

from registry.api import (
    alerts,
    boots,
    calibrations,
    document,
    evaluations,
    health,
    journal,
    keys,
    maintenance,
    parameters,
    problems,
    runs,
    vehicles,
)
from registry.services import Services

_RESOURCES = (vehicles, runs, calibrations, parameters, boots, maintenance, evaluations, alerts, journal)


def register(app: OpenAPI, services: Services) -> None:
    """
    Put up every door.

    Parameters
    ----------
    app
        Made by `document.make_app`.
    services
        What the handlers work with.
    """
    for resource in _RESOURCES:
        app.register_api(resource.doors)
    app.after_request(_guarded)
    keys.stand_before(app, services)
    document.register(app)
    health.register(app, services)


def _guarded(response: Response) -> Response:
    """What a machine's answer carries: it is what its type says, and is kept by nobody unless a door says otherwise."""
    if problems.is_for_machines(request.path):
        response.headers.setdefault("X-Content-Type-Options", "nosniff")
        response.headers.setdefault("Cache-Control", "no-store")
    return response
