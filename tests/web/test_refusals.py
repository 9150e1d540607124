"""A fault of the program: a page that tells nothing of it, and a log that tells no secret."""

from __future__ import annotations

import pytest
import structlog
from flask import Flask
from structlog.testing import capture_logs

from registry.commands import logs
from registry.web import refusals

SECRET = "orchard gate 7"


def failing() -> None:
    password = "".join(SECRET)  # A local variable, as a handler that checks one has it.
    if password:
        raise RuntimeError("the ledger is torn")


def answered(app: Flask) -> str:
    with app.test_request_context("/sign-in", method="POST"):
        try:
            failing()
        except RuntimeError as error:
            response = refusals.answer(error)
    assert response.status_code == 500
    return response.get_data(as_text=True)


@pytest.fixture
def as_it_comes():
    """The log as the library configures itself; every test gives it back as it was."""
    before = structlog.get_config() if structlog.is_configured() else None
    structlog.reset_defaults()
    yield
    structlog.reset_defaults()
    if before is not None:
        structlog.configure(**before)


def test_a_fault_is_logged_with_its_trace_and_without_local_variables(app: Flask, as_it_comes, capfd):
    page = answered(app)
    logged = "".join(capfd.readouterr())
    assert "RuntimeError: the ledger is torn" in logged
    assert "in failing" in logged
    assert SECRET not in logged
    assert SECRET not in page
    assert "ledger" not in page


def test_the_trace_is_one_field_of_one_event(app: Flask):
    with capture_logs() as logged:
        answered(app)
    (entry,) = logged
    assert (entry["event"], entry["method"], entry["path"]) == ("page failed", "POST", "/sign-in")
    assert entry["exception"].startswith("Traceback")


def test_the_configured_log_prints_no_local_variables_of_an_exception_that_is_handed_to_it(as_it_comes, capfd):
    logs.configure()
    try:
        failing()
    except RuntimeError as error:
        structlog.get_logger("registry.any").error("any", exc_info=error)
    logged = "".join(capfd.readouterr())
    assert "RuntimeError: the ledger is torn" in logged
    assert SECRET not in logged
