"""However odd a body is, it is refused or taken: never a fault, and never anything half stored."""

import copy
from datetime import timedelta

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from registry.procedures import upkeep

from .calling import ENTERED, VEHICLE, run

NUMBERS = [0, -1, 1.5, -0.0, 1e308, -1e308, 5e-324, 2**31, 2**63, -(2**63) - 1, 10**400]
TEXTS = ["", " ", "NaN", "\x00", "\ud800", "\u202e", "x" * 5000, "2026-03-02T06:00:00Z", "0001-01-01T00:00:00Z"]
OTHERS = [None, True, False, [], {}, [[]], [None], {"": 0}, {"value": 1}, [1, "a"], [0.1] * 3]
ODD = st.one_of(
    st.sampled_from([*NUMBERS, *TEXTS, *OTHERS]),
    st.integers(),
    st.floats(allow_nan=False, allow_infinity=False),
    st.text(max_size=8),
)
QUIET = settings(
    max_examples=60,
    deadline=None,
    # One application serves all examples of a test: what they leave behind is part of what is tried.
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)


def places(body, before=()):
    """Every place in a body, the samples of long lists left to a few."""
    yield before
    if isinstance(body, dict):
        for name, value in body.items():
            yield from places(value, (*before, name))
    elif isinstance(body, list):
        for index in list(range(len(body)))[:3]:
            yield from places(body[index], (*before, index))


def spoiled(body, place, value):
    if not place:
        return value
    changed = copy.deepcopy(body)
    inner = changed
    for step in place[:-1]:
        inner = inner[step]
    inner[place[-1]] = value
    return changed


@pytest.mark.parametrize(
    ("method", "path", "example"),
    [
        ("PUT", "/vehicles/LC-09", VEHICLE),
        ("POST", "/vehicles/LC-07/runs", "a run"),
        ("POST", "/vehicles/LC-07/calibrations", ENTERED),
        ("POST", "/vehicles/LC-07/calibrations", {"kind": "baseline", "run_ids": ["none"], "note": None}),
        ("POST", "/calibrations/in force/adoption", {"reason": "r", "in_force_from": None, "number": 1}),
        ("POST", "/calibrations/in force/withdrawal", {"reason": "r", "then": "reinstate", "number": 1}),
        ("POST", "/vehicles/LC-07/boots", {"calibration_number": 1, "digest": "a" * 64, "booted_at": None, "age_s": 5}),
        ("POST", "/vehicles/LC-07/maintenance", {"done_at": "2026-01-02T06:00:00Z", "kind": "towed", "side": None}),
    ],
    ids=["vehicle", "run", "entered", "baseline", "adoption", "withdrawal", "boot", "maintenance"],
)
def test_an_odd_value_anywhere_is_no_fault(call, services, clock, in_force, method, path, example):
    body = run("straight-a", clock.time - timedelta(hours=1), note="n") if example == "a run" else example
    path = path.replace("in force", in_force["calibration_id"])

    @QUIET
    @given(place=st.sampled_from(list(places(body))), value=ODD)
    def tried(place, value):
        answered = call(method, path, body=spoiled(body, place, value))
        assert answered.status_code < 500, (place, value)

    tried()
    assert upkeep.check(services) == []


@QUIET
@given(junk=st.binary(max_size=200), encoding=st.sampled_from(["", "gzip", "identity"]))
def test_junk_is_no_fault(call, junk, encoding):
    answered = call("POST", "/vehicles/LC-07/maintenance", body=junk, headers={"Content-Encoding": encoding})
    assert 400 <= answered.status_code < 500


@QUIET
@given(query=st.text(st.characters(codec="ascii", exclude_characters="#?"), max_size=30))
def test_an_odd_query_is_no_fault(call, query):
    assert call("GET", f"/journal?{query}").status_code < 500
