"""The OpenAPI document is valid, complete, and shown without asking another host for anything."""

import re

import jsonschema
import pytest

PARAMETER = re.compile(r"<(?:\w+:)?(\w+)>")


def test_every_route_is_in_the_document_and_every_operation_is_a_route(app, call):
    routes = {
        (method, PARAMETER.sub(r"{\1}", rule.rule))
        for rule in app.url_map.iter_rules()
        for method in rule.methods - {"HEAD", "OPTIONS"}
        if rule.rule.startswith("/api/") and not re.match(r"/api/v1/(docs|openapi\.json)", rule.rule)
    }
    operations = {(method.upper(), path) for path, item in call.document["paths"].items() for method in item}
    assert operations == routes
    assert len(routes) == 21


def test_the_document_is_openapi_3_1_and_its_schemas_are_json_schema(call):
    document = call.document
    assert document["openapi"].startswith("3.1.")
    for name, schema in document["components"]["schemas"].items():
        assert re.fullmatch(r"[a-zA-Z0-9._-]+", name)
        jsonschema.Draft202012Validator.check_schema(schema)
    assert document["components"]["securitySchemes"]["key"]["scheme"] == "bearer"


def test_conditional_headers_are_described_where_they_count(call):
    def headers(method, path):
        return [one["name"] for one in call.operation(method, path)["parameters"] if one["in"] == "header"]

    assert headers("PUT", "/vehicles/LC-07") == ["If-Match"]
    assert headers("GET", "/vehicles/LC-07/parameters") == ["If-None-Match"]
    assert headers("GET", "/vehicles/LC-07") == []


def references(node):
    if isinstance(node, dict):
        if isinstance(node.get("$ref"), str):
            yield node["$ref"]
        for value in node.values():
            yield from references(value)
    elif isinstance(node, list):
        for value in node:
            yield from references(value)


def test_every_reference_leads_to_a_schema(call):
    found = set(references(call.document))
    assert found
    for reference in found:
        prefix, _, name = reference.rpartition("/")
        assert prefix == "#/components/schemas"
        assert name in call.document["components"]["schemas"]


def test_every_operation_says_what_it_is_and_what_it_may_answer(call):
    seen = set()
    for path, item in call.document["paths"].items():
        for operation in item.values():
            assert operation["operationId"] not in seen
            seen.add(operation["operationId"])
            assert operation["summary"]
            assert "<br" not in operation["description"]
            assert "Needs the role" in operation["description"]
            assert operation["security"] == [{"key": []}]
            assert {"401", "403", "404", "422", "500"} <= set(operation["responses"])
            declared = {one["name"] for one in operation.get("parameters", []) if one["in"] == "path"}
            assert declared == set(re.findall(r"\{(\w+)\}", path))
            for status, response in operation["responses"].items():
                assert response["description"]
                if int(status) >= 400:
                    assert list(response["content"]) == ["application/problem+json"]


@pytest.mark.parametrize("path", ["docs", "docs/show.js", "docs/js/swagger-ui-bundle.js", "docs/css/swagger-ui.css"])
def test_the_page_and_its_files_are_served_from_here(app, path):
    with app.test_client().get(f"/api/v1/{path}") as response:
        assert response.status_code == 200
        if path == "docs":
            assert "http" not in response.get_data(as_text=True)
            assert "script-src 'self'" in response.headers["Content-Security-Policy"]


def test_the_pages_files_lead_nowhere_else(app):
    for path in ("docs/../../pyproject.toml", "docs/%2e%2e/__init__.py", "docs/nothing.js"):
        assert app.test_client().get(f"/api/v1/{path}").status_code == 404
