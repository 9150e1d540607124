"""The pages of an application: puts every page on it, with the guard before and the content policy after."""

from __future__ import annotations

import hashlib
from pathlib import Path

from flask import Blueprint, Flask, Response, make_response, request
from flask_wtf.csrf import generate_csrf
from werkzeug.exceptions import NotFound

from registry.services import Services
from registry.web import alerts, calibration, drawing, figures, fleet, journal, run, sign_in, vehicle
from registry.web.current import EXTENSION, may, person
from registry.web.policy import guarded

_HERE = Path(__file__).parent

#: What templates write figures with.
FILTERS = (
    "stamp",
    "moment",
    "day",
    "percent",
    "degrees",
    "millimetres",
    "metres",
    "span",
    "decimals",
    "who",
    "without_name",
)


def register(app: Flask, services: Services) -> None:
    """Put the pages on an application.

    Parameters
    ----------
    app
        The application; whatever goes wrong on a path that is not for machines is answered by ``refusals.answer``.
    services
        What the pages read and act through.
    """
    app.extensions[EXTENSION] = services
    app.secret_key = services.settings.secret_key
    app.config.update(
        SESSION_COOKIE_NAME="rollbook",
        SESSION_COOKIE_HTTPONLY=True,
        SESSION_COOKIE_SAMESITE="Lax",
        # A form lives as long as its session: what was typed over lunch is not lost.
        WTF_CSRF_TIME_LIMIT=None,
    )
    sign_in.manage(app)
    app.register_blueprint(_pages())


def _pages() -> Blueprint:
    pages = Blueprint(
        "web", __name__, template_folder="templates", static_folder="static", static_url_path="/static/pages"
    )
    pages.before_request(sign_in.guard)
    pages.after_request(guarded)
    for name in FILTERS:
        pages.add_app_template_filter(vars(figures)[name], name)
    look = _look()
    pages.app_context_processor(
        lambda: {
            "person": person(),
            "csrf_token": generate_csrf,
            "drawing_digest": lambda: drawing.script().digest,
            "look": look,
            "count": figures.count,
            "closing_words": figures.closing_words,
            "may": may,
        }
    )
    pages.add_url_rule("/drawing/<digest>.js", "drawing_script", _drawing_script)
    for room in (sign_in, fleet, vehicle, run, calibration, alerts, journal):
        room.doors(pages)
    return pages


def _look() -> str:
    """A name for the present style sheet and script, so that browsers fetch them anew when they change."""
    files = sorted((_HERE / "static").iterdir())
    return hashlib.sha256(b"".join(path.read_bytes() for path in files)).hexdigest()[:12]


def _drawing_script(digest: str) -> Response:
    """The bundle that draws charts, under a name that changes with it."""
    script = drawing.script()
    if digest != script.digest:
        raise NotFound
    packed = request.accept_encodings.quality("gzip") > 0
    response = make_response(script.packed if packed else script.plain)
    response.mimetype = "text/javascript"
    response.headers["Vary"] = "Accept-Encoding"
    response.headers["Cache-Control"] = "public, max-age=31536000, immutable"
    if packed:
        response.headers["Content-Encoding"] = "gzip"
    return response
