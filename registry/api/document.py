"""The OpenAPI document, the page that shows it, and what all doors have in common in it."""

from __future__ import annotations

from http import HTTPStatus
from importlib.metadata import version
from importlib.resources import files
from pathlib import Path
from typing import Any

from flask import Response, send_from_directory
from flask_openapi3.blueprint import APIBlueprint
from flask_openapi3.models.info import Info
from flask_openapi3.models.parameter import Parameter
from flask_openapi3.models.tag import Tag
from flask_openapi3.openapi import OpenAPI
from flask_openapi3.types import ResponseDict
from pydantic import ValidationError

from registry.api import problems
from registry.api.bodies import reply
from registry.api.strict_json import MAX_BODY_BYTES, StrictRequest

PREFIX = "/api/v1"


def refused(*statuses: int) -> ResponseDict:
    """Describe answers that are problem documents."""
    schema = {"$ref": f"#/components/schemas/{problems.Problem.__name__}"}
    return {
        status: {
            "description": HTTPStatus(status).phrase,
            "content": {problems.MEDIA_TYPE: {"schema": schema}},
        }
        for status in statuses
    }


def resource(name: str) -> APIBlueprint:
    """The doors of one resource: under the prefix, each wanting a key, each with the common refusals."""
    return APIBlueprint(
        f"api_{name}",
        __name__,
        url_prefix=PREFIX,
        abp_tags=[Tag(name=name)],
        abp_security=[{"key": []}],
        abp_responses=refused(400, 401, 403, 404, 413, 415, 422, 429, 500, 503),
    )


#: Answers beyond the common ones.
CONFLICTS = refused(409)
PRECONDITIONS = refused(412, 428)


def _header(name: str, description: str) -> Parameter:
    content = {"name": name, "in": "header", "description": description, "schema": {"type": "string"}}
    return Parameter.model_validate(content)


_IF_MATCH = _header("If-Match", "The `ETag` of the version that was seen; needed to change a known vehicle")
_IF_NONE_MATCH = _header("If-None-Match", "The `ETag` of the answer that is kept")

_DESCRIPTION = """\
A registry of fleet calibrations. Lengths are millimetres, angles degrees, shares percent, each named in its field;
times are RFC 3339 with a zone, answered in UTC. Headings are counter-clockwise positive, x ahead, y to the left.
Unknown fields and unknown query parameters are refused. Bodies may be gzipped (`Content-Encoding: gzip`).
Every refusal is a problem document (RFC 9457) that names the fields that are wrong.
"""

_PAGE = """\
<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>Rollbook: the doors</title>
<link rel="icon" href="data:,">
<link rel="stylesheet" href="docs/css/swagger-ui.css">
</head>
<body>
<div id="doors"></div>
<script src="docs/js/swagger-ui-bundle.js"></script>
<script src="docs/show.js"></script>
</body>
</html>
"""

_SHOW = """\
SwaggerUIBundle({
  url: "openapi.json",
  dom_id: "#doors",
  deepLinking: true,
  defaultModelsExpandDepth: 0,
  validatorUrl: null,
  presets: [SwaggerUIBundle.presets.apis]
});
"""

#: The page runs its own files only; styles are set by script on elements, pictures are inline in the style sheet.
_PAGE_POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; connect-src 'self'"
)


def _raise_invalid(error: ValidationError) -> Response:
    raise problems.invalid(error)


def make_app(import_name: str, **folders: Any) -> OpenAPI:
    """
    An application that reads strictly and describes its doors; it has none yet.

    Parameters
    ----------
    import_name
        As Flask wants it.
    folders
        Flask's own settings, such as where static files are.
    """
    app = OpenAPI(
        import_name,
        info=Info(title="Rollbook", version=version("rollbook"), description=_DESCRIPTION),
        security_schemes={
            "key": {"type": "http", "scheme": "bearer", "description": "An API key of a person or of a vehicle"}
        },
        validation_error_model=problems.Problem,
        validation_error_callback=_raise_invalid,
        doc_ui=False,
        **folders,
    )
    app.request_class = StrictRequest
    app.config["MAX_CONTENT_LENGTH"] = MAX_BODY_BYTES
    return app


def _complete(app: OpenAPI) -> None:
    """Say what the framework cannot read off a handler: conditional headers. And turn its HTML breaks into Markdown.

    The doors belong to every application of the process, so what is said already is not said again.
    """
    for item in app.paths.values():
        for operation in filter(None, (item.get, item.put, item.post)):
            operation.description = (operation.description or "").replace("<br/>", "\n").strip()
            told = {parameter.name for parameter in operation.parameters or ()}
            for status, header in (("412", _IF_MATCH), ("304", _IF_NONE_MATCH)):
                if status in operation.responses and header.name not in told:
                    operation.parameters = [*(operation.parameters or ()), header]


def register(app: OpenAPI) -> None:
    """Serve the document and its page; neither needs a key, and neither asks another host for anything."""
    _complete(app)
    shown = Path(str(files("flask_openapi3_swagger"))) / "templates" / "swagger"

    def openapi() -> Response:
        return reply(app.api_doc)

    def docs() -> Response:
        return Response(_PAGE, mimetype="text/html", headers={"Content-Security-Policy": _PAGE_POLICY})

    def show() -> Response:
        return Response(_SHOW, mimetype="text/javascript")

    def asset(name: str) -> Response:
        return send_from_directory(shown, name, max_age=86400)

    app.add_url_rule(f"{PREFIX}/openapi.json", "api_document", openapi)
    app.add_url_rule(f"{PREFIX}/docs", "api_docs", docs)
    app.add_url_rule(f"{PREFIX}/docs/show.js", "api_docs_show", show)
    app.add_url_rule(f"{PREFIX}/docs/<path:name>", "api_docs_asset", asset)
