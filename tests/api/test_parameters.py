"""What a vehicle is told to load: the same numbers in both forms, sealed under the key, 304 while nothing moves."""

import hashlib
import hmac
import json
from datetime import timedelta

import pytest

from registry.domain.alert import AlertContent
from registry.procedures import alerting, people
from registry.procedures.boot import refresh_sheet

from .calling import ENTERED, VEHICLE, run

PATH = "/vehicles/LC-07/parameters"
LINES = {"Accept": "text/plain"}
#: The order that the contract gives.
NAMES = [
    "VEHICLE_ID", "CALIBRATION_NUMBER", "IN_FORCE_FROM",
    "LEFT_MM_PER_TICK", "RIGHT_MM_PER_TICK", "WIDTH_MM",
    "U_LEFT_MM_PER_TICK", "U_RIGHT_MM_PER_TICK", "U_WIDTH_MM",
    "COUNTING_BITS", "CONDITION", "REASONS", "DIGEST", "TAG",
]  # fmt: skip


def tag(digest: str, vehicle_id: str, key: str) -> str:
    """The seal as the contract words it, written here anew."""
    secret = hashlib.sha256(key.encode("utf-8")).digest()
    return hmac.new(secret, digest.encode("ascii") + vehicle_id.encode("utf-8"), hashlib.sha256).hexdigest()


def c_number(value: float) -> str:
    return "%.12g" % value  # noqa: UP031 - the contract names C's format, and this is it


def propose_and_adopt(call, body):
    made = call.ok("POST", "/vehicles/LC-07/calibrations", body=body)
    return call.ok("POST", f"/calibrations/{made['calibration_id']}/adoption", body={"reason": "r"})


def test_the_answer_holds_what_is_in_force(call, in_force):
    loaded = call.ok("GET", PATH, "LC-07")
    assert loaded["vehicle_id"] == "LC-07"
    assert loaded["calibration_number"] == in_force["number"]
    assert loaded["in_force_from"] == in_force["in_force_from"]
    for name in ("left_mm_per_tick", "right_mm_per_tick", "width_mm"):
        assert loaded[name] == ENTERED[name]
        assert loaded["u"][name] == pytest.approx(ENTERED["u"][name], rel=1e-11)
    assert loaded["counting"] == {"bits": 32}
    assert loaded["condition"] == "good"
    assert loaded["reasons"] == []


def test_lines_are_in_order_and_carry_the_numbers_of_the_json(call, in_force):
    loaded = call.ok("GET", PATH, "LC-07")
    response = call("GET", PATH, "LC-07", headers=LINES)
    assert response.content_type == "text/plain; charset=utf-8"
    text = response.data.decode("utf-8")
    assert text.endswith("\n")
    assert "\r" not in text
    pairs = [line.split("=", 1) for line in text[:-1].split("\n")]
    assert [name for name, _ in pairs] == NAMES
    told = dict(pairs)
    assert told["VEHICLE_ID"] == "LC-07"
    assert told["CALIBRATION_NUMBER"] == "1"
    assert told["IN_FORCE_FROM"] == loaded["in_force_from"]
    for name in ("left_mm_per_tick", "right_mm_per_tick", "width_mm"):
        assert told[name.upper()] == c_number(loaded[name])
        assert told[f"U_{name.upper()}"] == c_number(loaded["u"][name])
    assert told["WIDTH_MM"] == "620.5"
    assert told["COUNTING_BITS"] == "32"
    assert told["CONDITION"] == "good"
    assert told["REASONS"] == ""
    assert (told["DIGEST"], told["TAG"]) == (loaded["digest"], loaded["tag"])


def test_digest_and_tag_follow_from_the_lines_and_the_key(call, in_force):
    for who in ("LC-07", "reader"):
        text = call("GET", PATH, who, headers=LINES).data
        told = dict(line.split("=", 1) for line in text.decode().splitlines())
        head = text[: text.index(b"\nCONDITION=") + 1]
        assert told["DIGEST"] == hashlib.sha256(head).hexdigest()
        assert told["TAG"] == tag(told["DIGEST"], "LC-07", call.keys[who])


def test_a_reader_may_read_and_the_tag_is_under_the_readers_key(call, in_force):
    own, persons = call.ok("GET", PATH, "LC-07"), call.ok("GET", PATH, "reader")
    assert own["digest"] == persons["digest"]
    assert own["tag"] != persons["tag"]


def test_whole_and_tiny_numbers_are_written_as_c_writes_them(call):
    tiny = {"left_mm_per_tick": 0.00001, "right_mm_per_tick": 0.00001, "width_mm": 1}
    propose_and_adopt(call, ENTERED | {"width_mm": 640, "left_mm_per_tick": 1 / 3, "u": tiny})
    text = call("GET", PATH, "LC-07", headers=LINES).get_data(as_text=True)
    assert "\nWIDTH_MM=640\n" in text
    assert "\nLEFT_MM_PER_TICK=0.333333333333\n" in text
    assert "\nU_LEFT_MM_PER_TICK=1e-05\n" in text
    assert "\nU_WIDTH_MM=1\n" in text
    assert call.ok("GET", PATH, "LC-07")["left_mm_per_tick"] == 0.333333333333


def test_nothing_in_force_says_which_numbers_were_withdrawn(call):
    told = call.problem(404, "GET", PATH, "LC-07")
    assert told["type"] == "/problems/nothing-in-force"
    assert told["withdrawn_numbers"] == []


@pytest.mark.parametrize("headers", [{}, LINES], ids=["json", "lines"])
def test_what_has_not_moved_is_304(call, in_force, headers):
    first = call("GET", PATH, "LC-07", headers=headers)
    etag = first.headers["ETag"]
    assert etag.startswith('"')
    assert set(first.headers["Vary"].split(", ")) == {"Accept", "Authorization"}
    assert "no-store" not in first.headers["Cache-Control"]
    for named in (etag, f"W/{etag}", f'"other", {etag}', "*"):
        again = call("GET", PATH, "LC-07", headers=headers | {"If-None-Match": named})
        assert (again.status_code, again.data) == (304, b""), named
        assert again.headers["ETag"] == etag
    assert call("GET", PATH, "LC-07", headers=headers | {"If-None-Match": '"other"'}).status_code == 200


def test_each_form_and_each_key_has_its_own_etag(call, in_force):
    tags = {
        call("GET", PATH, who, headers=headers).headers["ETag"]
        for who in ("LC-07", "reader")
        for headers in ({}, LINES)
    }
    assert len(tags) == 4


def test_the_etag_changes_with_condition_and_reasons_though_the_digest_stands(call, services, clock, in_force):
    before = call("GET", PATH, "LC-07")
    content = AlertContent(
        "beyond_tolerance", "width", "It moved.", "turns fall short", "calibrate", "high", "this shift"
    )
    with services.write() as c:
        alerting.raise_or_update(c, services, "LC-07", content, clock.time)
        refresh_sheet(c, "LC-07", clock.time)
    after = call("GET", PATH, "LC-07", headers={"If-None-Match": before.headers["ETag"]})
    assert after.status_code == 200
    assert after.get_json()["condition"] == "questioned"
    assert after.get_json()["reasons"] == ["It moved."]
    assert after.get_json()["digest"] == before.get_json()["digest"]
    assert after.headers["ETag"] != before.headers["ETag"]


def test_maintenance_that_ends_the_window_questions_until_a_new_calibration(call, clock, in_force):
    clock.move(days=1)
    work = {"done_at": (clock.time - timedelta(hours=1)).isoformat(), "kind": "part_fitted", "side": "left"}
    call.ok("POST", "/vehicles/LC-07/maintenance", "technician", work)
    loaded = call.ok("GET", PATH, "LC-07")
    assert loaded["condition"] == "questioned"
    assert "left" in loaded["reasons"][0]
    text = call("GET", PATH, "LC-07", headers=LINES).get_data(as_text=True)
    assert f"CONDITION=questioned\nREASONS={loaded['reasons'][0]}\n" in text
    propose_and_adopt(call, ENTERED | {"width_mm": 622})
    assert call.ok("GET", PATH, "LC-07")["condition"] == "good"


def test_provisional_values_never_read_good(call):
    propose_and_adopt(call, ENTERED | {"kind": "provisional"})
    assert call.ok("GET", PATH, "LC-07")["condition"] == "provisional"


def test_at_and_known_at_answer_the_past(call, clock, in_force):
    first_known = clock.time
    clock.move(days=10)
    second = propose_and_adopt(call, ENTERED | {"width_mm": 630})
    clock.move(days=1)
    made = call.ok("POST", "/vehicles/LC-07/calibrations", body=ENTERED | {"width_mm": 640})
    late = {"reason": "r", "in_force_from": (clock.time - timedelta(hours=12)).isoformat()}
    call.ok("POST", f"/calibrations/{made['calibration_id']}/adoption", body=late)

    def width(query):
        return call.ok("GET", f"{PATH}?{query}", "LC-07")["width_mm"]

    assert width("at=2026-03-03T00:00:00Z") == 620.5
    assert width(f"at={second['in_force_from']}") == 630
    between = (clock.time - timedelta(hours=6)).isoformat().replace("+00:00", "Z")
    assert width(f"at={between}") == 640
    assert width(f"at={between}&known_at={between}") == 630, "the late entry was not known then"
    assert width(f"known_at={first_known.isoformat().replace('+00:00', 'Z')}") == 620.5
    told = call.problem(404, "GET", f"{PATH}?at=2026-03-01T00:00:00Z", "LC-07")
    assert told["type"] == "/problems/nothing-in-force"


def test_the_past_is_sealed_and_tagged_too(call, in_force):
    now = call("GET", PATH, "LC-07")
    past = call("GET", f"{PATH}?at={in_force['in_force_from']}", "LC-07")
    assert past.get_json() == now.get_json()
    assert past.get_json()["tag"] == tag(past.get_json()["digest"], "LC-07", call.keys["LC-07"])
    again = call(
        "GET", f"{PATH}?at={in_force['in_force_from']}", "LC-07", headers={"If-None-Match": past.headers["ETag"]}
    )
    assert again.status_code == 304


@pytest.mark.parametrize("query", ["at=2026-03-01T00:00:00", "at=now", "known_at=", "at=2026-03-01T00:00:00+01:00"])
def test_a_time_that_is_none_is_refused(call, in_force, query):
    told = call.problem(422, "GET", f"{PATH}?{query}", "LC-07")
    assert told["errors"][0]["pointer"] == "/" + query.partition("=")[0]


def test_the_form_follows_the_weights_of_accept(call, in_force):
    for accept, kind in (
        ("text/plain, application/json;q=0.5", "text/plain"),
        ("text/plain;q=0.5, application/json", "application/json"),
        ("text/*", "text/plain"),
        ("*/*", "application/json"),
        ("image/png", "application/json"),
        ("", "application/json"),
    ):
        assert call("GET", PATH, "LC-07", headers={"Accept": accept}).mimetype == kind, accept


def test_a_new_key_of_the_vehicle_tags_under_itself_and_the_old_one_still_works(call, services, local, in_force):
    call.keys["new"] = people.issue_key(services, local, vehicle_id="LC-07")
    for who in ("LC-07", "new"):
        loaded = call.ok("GET", PATH, who)
        assert loaded["tag"] == tag(loaded["digest"], "LC-07", call.keys[who])


def test_the_counting_set_up_is_the_vehicles_present_one(call, in_force):
    etag = call("GET", "/vehicles/LC-07").headers["ETag"]
    before = call.ok("GET", PATH, "LC-07")
    call.ok("PUT", "/vehicles/LC-07", body=VEHICLE | {"counter_bits": 16}, headers={"If-Match": etag})
    after = call.ok("GET", PATH, "LC-07")
    assert after["counting"] == {"bits": 16}
    assert after["digest"] != before["digest"]


def test_what_is_loaded_over_http_is_what_a_boot_reports(call, in_force):
    loaded = call.ok("GET", PATH, "LC-07")
    report = {"digest": loaded["digest"], "source": "fetched", "age_s": 0, "software": "loader 3"}
    booted = call("POST", "/vehicles/LC-07/boots", "LC-07", report)
    assert booted.status_code == 201
    assert booted.get_json()["matched"] is True
    assert booted.get_json()["calibration_id"] == in_force["calibration_id"]
    assert call.ok("GET", "/alerts")["items"] == []


def test_the_json_is_the_same_bytes_every_time(call, in_force):
    first, second = call("GET", PATH, "LC-07"), call("GET", PATH, "LC-07")
    assert first.data == second.data
    assert json.loads(first.data) == first.get_json()


def test_a_run_driven_on_the_parameters_changes_nothing_about_them(call, clock, in_force):
    before = call("GET", PATH, "LC-07").headers["ETag"]
    call.ok("POST", "/vehicles/LC-07/runs", "LC-07", run("straight-a", clock.time - timedelta(hours=1)))
    assert call("GET", PATH, "LC-07").headers["ETag"] == before
