"""Every refusal is a problem document, on every path that machines read."""

import threading

import pytest
from sqlalchemy import text
from structlog.testing import capture_logs
from werkzeug.exceptions import Gone, ImATeapot

from registry import errors
from registry.api import problems
from registry.app import create_app
from registry.errors import FieldError, NothingInForce, Refusal
from tests.conftest import services_in

CLASSES = [one for one in vars(errors).values() if isinstance(one, type) and issubclass(one, Refusal)]


def test_every_class_of_refusal_has_its_status_and_type():
    assert set(problems.TABLE) == set(CLASSES) - {Refusal}
    slugs = [slug for _, slug, _ in problems.TABLE.values()]
    assert len(set(slugs)) == len(slugs)


@pytest.mark.parametrize("kind", [one for one in CLASSES if one not in (Refusal, NothingInForce)])
def test_a_refusal_is_answered_with_its_fields(app, kind):
    with app.test_request_context("/api/v1/vehicles"):
        answered = problems.answer(kind("Do this instead.", (FieldError("/a", "wrong"),)))
    told = answered.get_json()
    assert answered.status_code == told["status"]
    assert told["detail"] == "Do this instead."
    assert told["errors"] == [{"pointer": "/a", "detail": "wrong"}]


@pytest.mark.parametrize("path", ["/api/v1/nothing", "/api/v1", "/api/", "/api/v2/vehicles", "/api/v1/vehicles/"])
def test_a_path_that_is_not_there_is_a_problem_document(app, path):
    for method in ("GET", "POST", "DELETE"):
        response = app.test_client().open(path, method=method)
        assert response.status_code == 404
        assert response.mimetype == "application/problem+json"
        assert response.get_json()["type"] == "/problems/not-found"


@pytest.mark.parametrize(
    ("method", "path"),
    [
        ("DELETE", "/api/v1/vehicles/LC-07"),
        ("POST", "/api/v1/vehicles"),
        ("PATCH", "/api/v1/runs/x"),
        ("POST", "/healthz"),
    ],
)
def test_a_method_that_is_not_there_says_which_are(app, method, path):
    response = app.test_client().open(path, method=method)
    assert response.status_code == 405
    assert response.get_json()["type"] == "/problems/method-not-allowed"
    assert "GET" in response.headers["Allow"]


def test_http_exceptions_keep_their_headers_and_redirects_pass(app):
    with app.test_request_context("/api/v1/x"):
        assert problems.answer(Gone("It went.")).get_json()["detail"] == "It went."
        assert problems.answer(ImATeapot()).status_code == 418
    assert app.test_client().get("/api/v1/docs/").status_code == 404


def test_a_fault_is_logged_and_nothing_of_it_is_told(call, services):
    with services.write() as c:
        c.execute(text("DROP TABLE alert_events"))
        c.execute(text("DROP TABLE alerts"))
    with capture_logs() as logged:
        told = call.problem(500, "GET", "/alerts")
    assert told["type"] == "/problems/fault"
    assert "alerts" not in told["detail"]
    assert [entry["event"] for entry in logged] == ["request failed"]
    assert "no such table" in logged[0]["exception"]
    assert call.keys["keeper"] not in str(logged)


def test_answers_say_that_they_are_what_they_say_and_are_not_kept(call):
    for response in (call("GET", "/vehicles"), call("GET", "/vehicles/none"), call("GET", "/alerts", None)):
        assert response.headers["X-Content-Type-Options"] == "nosniff"
        assert response.headers["Cache-Control"] == "no-store"
        assert "Set-Cookie" not in response.headers


def test_alive_and_ready_need_no_key(app):
    assert app.test_client().get("/healthz").get_json() == {"status": "alive"}
    assert app.test_client().get("/readyz").get_json() == {"status": "ready"}


def test_a_database_that_is_not_at_head_is_alive_but_not_ready(app, services):
    with services.write() as c:
        c.execute(text("UPDATE alembic_version SET version_num = '0000'"))
    assert app.test_client().get("/healthz").status_code == 200
    response = app.test_client().get("/readyz")
    assert response.status_code == 503
    assert response.mimetype == "application/problem+json"
    assert "rollbook migrate" in response.get_json()["detail"]


def test_a_database_that_is_not_reachable_is_alive_but_not_ready(app, services):
    database = services.settings.home / "rollbook.db"
    database.unlink()
    database.mkdir()
    assert app.test_client().get("/healthz").status_code == 200
    response = app.test_client().get("/readyz")
    assert response.status_code == 503
    assert response.get_json()["type"] == "/problems/unready"


def test_making_an_application_opens_no_connection_and_starts_no_thread(tmp_path, clock):
    threads = threading.active_count()
    create_app(services_in(tmp_path, clock))
    assert list(tmp_path.iterdir()) == []
    assert threading.active_count() == threads
