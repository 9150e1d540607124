"""Fields turn door units into SI once, and name the sample that is wrong."""

import math
from datetime import UTC, datetime

import numpy as np
import pytest
from pydantic import BaseModel, ValidationError

from registry.api import fields
from registry.api.bodies import Body, PageQuery
from registry.api.problems import invalid
from registry.errors import TooLarge


class Timed(Body):
    at: fields.Time


class Logged(Body):
    time_s: fields.Times = np.zeros(0)
    left_counts: fields.Counts = np.zeros(0, dtype=np.int64)


class Written(Body):
    name: fields.Name = "n"
    label: fields.Label = None
    note: fields.Note = None
    reason: fields.Reason = "r"
    run_key: fields.RunKey = "k"


def refused(model: type[BaseModel], content: object) -> list[tuple[str, str]]:
    with pytest.raises(ValidationError) as found:
        model.model_validate(content)
    return [(error.pointer, error.detail) for error in invalid(found.value).errors]


@pytest.mark.parametrize(
    ("text", "read"),
    [
        ("2031-05-04T06:30:00Z", datetime(2031, 5, 4, 6, 30, tzinfo=UTC)),
        ("2031-05-04t06:30:00z", datetime(2031, 5, 4, 6, 30, tzinfo=UTC)),
        ("2031-05-04 06:30:00.25+02:00", datetime(2031, 5, 4, 4, 30, 0, 250000, tzinfo=UTC)),
        ("2031-05-04T06:30:00.123456789-00:30", datetime(2031, 5, 4, 7, 0, 0, 123456, tzinfo=UTC)),
    ],
)
def test_a_time_is_read_in_utc(text, read):
    assert Timed.model_validate({"at": text}).at == read


@pytest.mark.parametrize(
    "text",
    [
        "2031-05-04T06:30:00",
        "2031-05-04",
        "2031-13-04T06:30:00Z",
        "2031-02-30T06:30:00Z",
        "2031-05-04T25:30:00Z",
        "2031-05-04T06:30:61Z",
        "2031-05-04T06:30:00+2500",
        "2031-05-04T06:30:00Z\n",
        "٢031-05-04T06:30:00Z",
        "0001-01-01T00:00:00+14:00",
        "now",
        "",
        1936248600,
        None,
        True,
    ],
)
def test_what_is_no_time_with_a_zone_is_refused(text):
    assert [pointer for pointer, _ in refused(Timed, {"at": text})] == ["/at"]


def test_a_plus_that_became_a_blank_in_a_url_is_named():
    assert "%2B" in refused(Timed, {"at": "2031-05-04T06:30:00 02:00"})[0][1]


def test_times_and_counts_become_arrays():
    logged = Logged.model_validate({"time_s": [0, 0.5, 1e0], "left_counts": [3, 4.0, 2**62]})
    assert logged.time_s.dtype == np.float64
    assert logged.time_s.tolist() == [0.0, 0.5, 1.0]
    assert logged.left_counts.dtype == np.int64
    assert logged.left_counts.tolist() == [3, 4, 2**62]


@pytest.mark.parametrize(
    ("values", "place"),
    [
        ([0, 1, True], "/left_counts/2"),
        ([0, "1"], "/left_counts/1"),
        ([None, 1], "/left_counts/0"),
        ([0, [1]], "/left_counts/1"),
        ([0, 1, 2, 2.5], "/left_counts/3"),
        ([0, float("inf")], "/left_counts/1"),
        ([0, 1e300], "/left_counts/1"),
        ([0, 2**63], "/left_counts/1"),
        ([0, -(10**400)], "/left_counts/1"),
        ({"0": 1}, "/left_counts"),
        ("0,1", "/left_counts"),
        (None, "/left_counts"),
    ],
)
def test_a_count_that_is_none_is_refused_with_its_sample(values, place):
    assert [pointer for pointer, _ in refused(Logged, {"left_counts": values})] == [place]


@pytest.mark.parametrize(
    ("values", "place"),
    [
        ([0, 1, False], "/time_s/2"),
        ([0, "1"], "/time_s/1"),
        ([0, 1, float("inf")], "/time_s/2"),
        ([0, 10**400], "/time_s/1"),
        ([0, 2**63], "/time_s/1"),
        ([0, -1e13, 10**400], "/time_s/1"),
        ([[0], [1]], "/time_s/0"),
        (5, "/time_s"),
    ],
)
def test_a_time_that_is_no_number_is_refused_with_its_sample(values, place):
    assert [pointer for pointer, _ in refused(Logged, {"time_s": values})] == [place]


def test_more_samples_than_the_door_takes_are_too_large():
    with pytest.raises(TooLarge):
        Logged.model_validate({"time_s": [0] * 2_000_001})


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("name", ""),
        ("name", "   "),
        ("name", "a\nb"),
        ("name", "x" * 201),
        ("label", "a\x00b"),
        ("label", "x" * 201),
        ("note", "bell \x07"),
        ("note", "half \ud800"),
        ("reason", " \n"),
        ("run_key", ""),
        ("run_key", "a\tb"),
        ("run_key", "\x85"),
        ("run_key", "x" * 201),
        ("run_key", 5),
    ],
)
def test_a_text_that_does_not_fit_is_refused(field, value):
    assert [pointer for pointer, _ in refused(Written, {field: value})] == [f"/{field}"]


def test_an_empty_optional_text_is_none_and_a_note_may_have_lines():
    written = Written.model_validate({"label": "", "note": "one\r\n\ttwo"})
    assert written.label is None
    assert written.note == "one\r\n\ttwo"


def test_an_unknown_field_is_named_and_so_is_a_missing_one():
    assert refused(Timed, {"when": "2031-05-04T06:30:00Z"}) == [
        ("/at", "is missing: give it"),
        ("/when", "is not a field of this door: remove it"),
    ]


@pytest.mark.parametrize("limit", ["0", "1001", "1.5", "ten", "", "1e3", "-1", "99999999999999999999"])
def test_a_limit_that_is_none_is_refused(limit):
    assert [pointer for pointer, _ in refused(PageQuery, {"limit": limit})] == ["/limit"]


@pytest.mark.parametrize("after", ["", "a b", "a=", "ä", "a" * 201])
def test_a_token_of_other_characters_is_refused(after):
    assert [pointer for pointer, _ in refused(PageQuery, {"after": after})] == ["/after"]


def test_door_units_are_written_with_twelve_digits():
    assert fields.mm(0.0003477) == 0.3477
    assert fields.percent(0.0015) == 0.15
    assert fields.deg(math.pi) == 180.0
    assert math.copysign(1, fields.mm(-0.0) or 0.0) == 1.0
    assert fields.mm(None) is None
    assert fields.instant(datetime(2031, 5, 4, 6, 30, tzinfo=UTC)) == "2031-05-04T06:30:00Z"


def test_the_plain_query_schema_is_made_once():
    assert PageQuery.model_json_schema() is PageQuery.model_json_schema()
    assert "after" in PageQuery.model_json_schema()["properties"]
