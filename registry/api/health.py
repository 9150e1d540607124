"""Whether the program is alive, and whether it can work. Neither needs a key, neither tells anything of the record."""

from __future__ import annotations

from flask import Flask, Response

from registry.api.bodies import reply
from registry.procedures import upkeep
from registry.services import Services


def register(app: Flask, services: Services) -> None:
    """Put up the two doors outside the API."""

    def healthz() -> Response:
        return reply({"status": "alive"})

    def readyz() -> Response:
        upkeep.require_ready(services)
        return reply({"status": "ready"})

    app.add_url_rule("/healthz", "healthz", healthz)
    app.add_url_rule("/readyz", "readyz", readyz)
