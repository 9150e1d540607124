"""Whatever is wrong with a body is said with status and pointer, and nothing of it is stored."""

import gzip
import json
from datetime import timedelta
from io import BytesIO

import pytest
from sqlalchemy import inspect, text

from registry.api.strict_json import MAX_BODY_BYTES, MAX_SAMPLES

from .calling import VEHICLE, pointers, run

RUNS = "/vehicles/LC-07/runs"
GZIP = {"Content-Encoding": "gzip"}


@pytest.fixture
def body(clock):
    return run("square-left", clock.time - timedelta(hours=2))


@pytest.fixture
def rows(services):
    """Counts the rows of every table."""

    def count() -> dict[str, int]:
        with services.read() as c:
            tables = inspect(c).get_table_names()
            return {table: c.execute(text(f"SELECT count(*) FROM {table}")).scalar_one() for table in tables}

    return count


@pytest.fixture
def refused(call, rows):
    """Sends what must be refused; answers the problem after seeing that nothing was stored."""

    def send(status, body, method="POST", path=RUNS, **more):
        before = rows()
        told = call.problem(status, method, path, "keeper", body, **more)
        assert rows() == before
        return told

    return send


def as_text(body, **changed) -> str:
    return json.dumps(body | changed)


def test_the_body_that_the_cases_below_spoil_is_good(call, body):
    assert call("POST", RUNS, body=body).status_code == 201


@pytest.mark.parametrize(
    ("spoil", "place"),
    [
        (lambda t: t[:-30], None),
        (lambda t: t[:0], None),
        (lambda t: t.replace("{", "(", 1), None),
        (lambda t: t.replace('"run_key": ', '"run_key": "other", "run_key": ', 1), "/run_key"),
        (lambda t: t.replace('"x_mm": ', '"x_mm": 1, "x_mm": ', 1), "/closure/x_mm"),
        (lambda t: t.replace('"x_mm": ', '"x_mm": NaN, "z": ', 1), "/closure/x_mm"),
        (lambda t: t.replace("[0.0, ", "[Infinity, ", 1), "/time_s/0"),
        (lambda t: t.replace("[0.0, ", "[-Infinity, ", 1), "/time_s/0"),
        (lambda t: t.replace("[100000, ", "[" + "9" * 5000 + ", ", 1), "/left_counts/0"),
        (lambda t: t.replace('"closure": {', '"closure": ' + "[" * 100_000, 1), None),
        (lambda t: t.replace("run_key", "run_k\ufffdy").encode("utf-16"), None),
        (lambda t: t.encode() + b"\xff", None),
    ],
)
def test_a_body_that_cannot_be_read_is_400(refused, body, spoil, place):
    spoiled = spoil(json.dumps(body))
    told = refused(400, spoiled if isinstance(spoiled, bytes) else spoiled.encode())
    assert told["type"] == "/problems/malformed"
    assert pointers(told) == ([] if place is None else [place])


@pytest.mark.parametrize("whole", [b"[]", b"null", b'"{}"', b"5"])
def test_a_body_that_is_no_object_is_422_and_points_at_the_whole(refused, whole):
    assert pointers(refused(422, whole)) == [""]


def test_a_byte_order_mark_and_windows_line_ends_are_tolerated(call, body):
    windows = b"\xef\xbb\xbf" + json.dumps(body, indent=1).replace("\n", "\r\n").encode()
    assert call("POST", RUNS, body=windows).status_code == 201
    assert call("POST", RUNS, body=body).status_code == 200


@pytest.mark.parametrize("name", ["run_key", "started_at", "time_s", "left_counts", "right_counts", "closure"])
def test_a_field_that_is_missing_or_null_is_named(refused, body, name):
    assert pointers(refused(422, body | {name: None})) == [f"/{name}"]
    del body[name]
    assert pointers(refused(422, body)) == [f"/{name}"]


@pytest.mark.parametrize(
    ("changed", "place"),
    [
        ({"runkey": "k"}, "/runkey"),
        ({"": 1}, "/"),
        ({"a/b~c": 1}, "/a~1b~0c"),
        ({"run_key": ""}, "/run_key"),
        ({"run_key": "x" * 201}, "/run_key"),
        ({"run_key": "a\nb"}, "/run_key"),
        ({"run_key": 7}, "/run_key"),
        ({"run_key": "\ud800"}, "/run_key"),
        ({"started_at": "2026-03-02T06:00:00"}, "/started_at"),
        ({"started_at": "2026-03-02"}, "/started_at"),
        ({"started_at": 1772431200}, "/started_at"),
        ({"started_at": "2026-03-02T08:35:16Z"}, "/started_at"),
        ({"started_at": "9999-12-31T23:59:59Z"}, "/started_at"),
        ({"load_kg": -1}, "/load_kg"),
        ({"load_kg": "120"}, "/load_kg"),
        ({"note": "\u0000"}, "/note"),
        ({"note": "x" * 10_001}, "/note"),
        ({"start_mark": ["A"]}, "/start_mark"),
        ({"closure": [1, 2]}, "/closure"),
        ({"closure": {}}, "/closure"),
        ({"closure": {"turns": 2}}, "/closure"),
        ({"closure": {"x_mm": 1.0}}, "/closure/position_sd_mm"),
        ({"closure": {"x_mm": 1.0, "position_sd_mm": 0}}, "/closure/position_sd_mm"),
        ({"closure": {"x_mm": 1.0, "position_sd_mm": -2}}, "/closure/position_sd_mm"),
        ({"closure": {"heading_deg": 1.0}}, "/closure/heading_sd_deg"),
        ({"closure": {"heading_deg": 1.0, "heading_sd_deg": 0}}, "/closure/heading_sd_deg"),
        ({"closure": {"heading_deg": -180, "heading_sd_deg": 1, "turns": 1}}, "/closure/heading_deg"),
        ({"closure": {"heading_deg": 180.001, "heading_sd_deg": 1, "turns": 0}}, "/closure/heading_deg"),
        ({"closure": {"distance_mm": -5, "position_sd_mm": 1}}, "/closure/distance_mm"),
        ({"closure": {"x_mm": "5", "position_sd_mm": 1}}, "/closure/x_mm"),
        ({"closure": {"x_mm": True, "position_sd_mm": 1}}, "/closure/x_mm"),
        ({"closure": {"x_mm": 10**400, "position_sd_mm": 1}}, "/closure/x_mm"),
        ({"closure": {"x_mm": 1e300, "position_sd_mm": 1}}, "/closure/x_mm"),
        ({"closure": {"heading_deg": 0, "heading_sd_deg": 1, "turns": 0.5}}, "/closure/turns"),
        ({"closure": {"heading_deg": 0, "heading_sd_deg": 1, "turns": 10**20}}, "/closure/turns"),
        ({"closure": {"x_m": 1, "position_sd_mm": 1}}, "/closure/x_m"),
        ({"closure": {"x_mm": 1, "position_sd_mm": 1, "heading_rad": 0}}, "/closure/heading_rad"),
    ],
)
def test_a_field_that_is_wrong_is_named(refused, body, changed, place):
    told = refused(422, body | changed)
    assert told["type"] == "/problems/invalid"
    assert place in pointers(told)
    assert all(error["detail"] for error in told["errors"])


def test_a_number_beyond_floating_point_is_named(refused, body):
    infinite = json.dumps(body).replace('"x_mm": ', '"x_mm": 1e999, "was": ', 1).encode()
    assert "/closure/x_mm" in pointers(refused(422, infinite))
    late = json.dumps(body).replace("[0.0, ", "[-1e999, ", 1).encode()
    assert pointers(refused(422, late)) == ["/time_s/0"]


@pytest.mark.parametrize(
    ("name", "index", "value"),
    [
        ("left_counts", 17, 1.5),
        ("left_counts", 17, True),
        ("left_counts", 17, "1"),
        ("left_counts", 17, None),
        ("left_counts", 17, [1]),
        ("left_counts", 17, -1),
        ("left_counts", 17, 2**32),
        ("right_counts", 0, 2**64),
        ("right_counts", 3, 10**4000),
        ("time_s", 17, "1.7"),
        ("time_s", 17, False),
        ("time_s", 17, None),
        ("time_s", 17, 10**400),
        ("time_s", 17, -5),
    ],
)
def test_a_sample_that_is_wrong_is_named(refused, body, name, index, value):
    body[name][index] = value
    assert f"/{name}/{index}" in pointers(refused(422, body))


def test_times_must_rise(refused, body):
    body["time_s"][9] = body["time_s"][8]
    assert pointers(refused(422, body)) == ["/time_s/9"]
    assert pointers(refused(422, body | {"time_s": body["time_s"][::-1]})) == ["/time_s/1"]


@pytest.mark.parametrize("samples", [0, 1])
def test_a_run_of_one_sample_is_none(refused, body, samples):
    short = body | {name: body[name][:samples] for name in ("time_s", "left_counts", "right_counts")}
    assert pointers(refused(422, short)) == ["/time_s"]


def test_a_times_column_in_other_units_that_leaves_the_calendar_is_refused(refused, body):
    body["time_s"] = [time * 1e14 for time in body["time_s"]]
    assert pointers(refused(422, body))[0].startswith("/time_s")


@pytest.mark.parametrize("name", ["left_counts", "right_counts"])
def test_columns_of_other_lengths_are_named(refused, body, name):
    assert f"/{name}" in pointers(refused(422, body | {name: body[name][:-1]}))


def test_several_wrong_fields_are_named_together(refused, body):
    del body["closure"]
    told = refused(422, body | {"run_key": "", "load_kg": -1, "colour": "red"})
    assert set(pointers(told)) == {"/run_key", "/load_kg", "/colour", "/closure"}


@pytest.mark.parametrize(
    "spoil", [lambda b: b, lambda b: gzip.compress(b)[:-9], lambda b: gzip.compress(b) + b"x", lambda b: b[:0]]
)
def test_wrong_gzip_is_400(refused, body, spoil):
    refused(400, spoil(json.dumps(body).encode()), headers=GZIP)


def test_gzip_of_something_else_is_400(refused):
    refused(400, gzip.compress(b"time_s,left_counts,right_counts\r\n0,1,1\r\n"), headers=GZIP)


def test_another_encoding_is_415(refused, body):
    refused(415, json.dumps(body).encode(), headers={"Content-Encoding": "br"})


def test_a_gzip_bomb_is_413(refused):
    told = refused(413, gzip.compress(bytes(300_000_000), 9), headers=GZIP)
    assert told["type"] == "/problems/too-large"


def test_ten_million_samples_are_413(refused):
    column = b"[" + b"1," * 9_999_999 + b"1]"
    whole = b'{"run_key": "k", "time_s": ' + column + b', "left_counts": ' + column + b"}"
    told = refused(413, gzip.compress(whole, 1), headers=GZIP)
    assert f"{MAX_SAMPLES:,} samples" in told["detail"]


def test_one_sample_too_many_is_413(refused):
    whole = b'{"run_key": "k", "time_s": [' + b"1," * MAX_SAMPLES + b"1]}"
    refused(413, gzip.compress(whole, 1), headers=GZIP)


def test_a_body_over_16_mb_is_413_whether_it_says_so_or_not(call, refused):
    long = b" " * (MAX_BODY_BYTES + 1)
    refused(413, long)
    unsaid = {"input_stream": BytesIO(long), "environ_overrides": {"wsgi.input_terminated": True}}
    refused(413, None, headers={"Transfer-Encoding": "chunked"}, **unsaid)


@pytest.mark.parametrize(
    ("changed", "place"),
    [
        ({"name": None}, "/name"),
        ({"name": " "}, "/name"),
        ({"drive": "legs"}, "/drive"),
        ({"nominal": None}, "/nominal"),
        ({"nominal": {"left_mm_per_tick": 0.35, "right_mm_per_tick": 0.35}}, "/nominal/width_mm"),
        ({"nominal": VEHICLE["nominal"] | {"width_mm": 0}}, "/nominal/width_mm"),
        ({"nominal": VEHICLE["nominal"] | {"left_mm_per_tick": -0.35}}, "/nominal/left_mm_per_tick"),
        ({"nominal": VEHICLE["nominal"] | {"right_m_per_tick": 1}}, "/nominal/right_m_per_tick"),
        ({"counter_bits": 0}, "/counter_bits"),
        ({"counter_bits": 65}, "/counter_bits"),
        ({"counter_bits": 16.0}, "/counter_bits"),
        ({"counter_bits": "32"}, "/counter_bits"),
        ({"max_speed_mm_per_s": 0}, "/max_speed_mm_per_s"),
        ({"max_speed_mm_per_s": None}, "/max_speed_mm_per_s"),
        ({"reference_point": {"ahead_mm": "0"}}, "/reference_point/ahead_mm"),
        ({"reference_point": None}, "/reference_point"),
        ({"tolerance": {"width_percent": 0}}, "/tolerance/width_percent"),
        ({"tolerance": {"width_percent": 101}}, "/tolerance/width_percent"),
        ({"tolerance": {"width": 1}}, "/tolerance/width"),
        ({"wheels": 4}, "/wheels"),
    ],
)
def test_a_vehicle_that_is_wrong_is_named(refused, changed, place):
    told = refused(422, VEHICLE | changed, "PUT", "/vehicles/LC-09")
    assert pointers(told) == [place]
