"""Vehicles are stated once, stated anew only by who saw the present version, and listed with how they stand."""

import pytest

from .calling import ENTERED, VEHICLE, pointers


def test_a_new_vehicle_is_201_and_the_same_statement_again_200(call):
    first = call("PUT", "/vehicles/LC-09", "approver", VEHICLE)
    again = call("PUT", "/vehicles/LC-09", "approver", VEHICLE)
    assert (first.status_code, again.status_code) == (201, 200)
    assert first.get_json() == again.get_json()
    assert first.headers["ETag"] == again.headers["ETag"]


def test_a_vehicle_answers_what_was_stated_in_the_units_of_the_door(call):
    answered = call.ok("PUT", "/vehicles/LC-09", body=VEHICLE)
    assert {name: answered[name] for name in VEHICLE} == VEHICLE
    assert answered["version"] == 1
    assert answered["valid_from"] is None
    assert answered["recorded_by"] == "keeper"


def test_what_is_optional_has_the_defaults_of_the_contract(call):
    least = {name: VEHICLE[name] for name in ("name", "drive", "nominal", "max_speed_mm_per_s")}
    answered = call.ok("PUT", "/vehicles/LC-09", body=least)
    assert answered["counter_bits"] == 32
    assert answered["reference_point"] == {"ahead_mm": 0, "left_mm": 0}
    assert answered["tolerance"] == {"tick_factor_percent": 0.5, "side_ratio_percent": 0.15, "width_percent": 1.5}
    assert answered["site"] is None
    assert answered["serial"] is None


def test_the_body_may_repeat_the_identity_of_the_path_and_no_other(call):
    plain = call("PUT", "/vehicles/LC-09", "approver", VEHICLE)
    repeated = call("PUT", "/vehicles/LC-09", "approver", {"vehicle_id": "LC-09"} | VEHICLE)
    assert (plain.status_code, repeated.status_code) == (201, 200)
    assert plain.headers["ETag"] == repeated.headers["ETag"]
    told = call.problem(422, "PUT", "/vehicles/LC-10", "approver", {"vehicle_id": "LC-09"} | VEHICLE)
    assert pointers(told) == ["/vehicle_id"]
    assert "'LC-09', but the path names 'LC-10'" in told["detail"]
    call.problem(404, "GET", "/vehicles/LC-10")
    told = call.problem(422, "PUT", "/vehicles/LC-10", body={"vehicle_id": "a b"} | VEHICLE)
    assert pointers(told) == ["/vehicle_id"]


def test_other_values_need_the_version_that_was_seen(call):
    etag = call("GET", "/vehicles/LC-07").headers["ETag"]
    other = VEHICLE | {"counter_bits": 16}
    told = call.problem(428, "PUT", "/vehicles/LC-07", body=other)
    assert told["type"] == "/problems/precondition-required"
    call.problem(412, "PUT", "/vehicles/LC-07", body=other, headers={"If-Match": '"stale"'})
    call.problem(412, "PUT", "/vehicles/LC-07", body=other, headers={"If-Match": f"W/{etag}"})
    call.problem(412, "PUT", "/vehicles/LC-07", body=other, headers={"If-Match": f'"stale", {etag}'})
    assert call.ok("GET", "/vehicles/LC-07")["version"] == 1
    changed = call("PUT", "/vehicles/LC-07", body=other, headers={"If-Match": etag})
    assert changed.status_code == 200
    assert changed.get_json()["version"] == 2
    assert changed.get_json()["valid_from"] == "2026-03-02T08:30:15.250000Z"
    assert changed.headers["ETag"] != etag
    assert call("GET", "/vehicles/LC-07").headers["ETag"] == changed.headers["ETag"]
    call.problem(412, "PUT", "/vehicles/LC-07", body=VEHICLE, headers={"If-Match": etag})


def test_a_stale_version_is_refused_even_for_a_new_vehicle(call):
    call.problem(412, "PUT", "/vehicles/LC-09", body=VEHICLE, headers={"If-Match": '"any"'})
    call.problem(404, "GET", "/vehicles/LC-09")


@pytest.mark.parametrize("vehicle_id", ["a b", "ä", "x" * 65, "a%00", "a:b", ".."])
def test_an_identity_of_other_characters_is_refused(call, vehicle_id):
    path = f"/vehicles/{vehicle_id}"
    refused = call.app.test_client().put(
        f"/api/v1{path}", json=VEHICLE, headers={"Authorization": f"Bearer {call.keys['keeper']}"}
    )
    assert refused.status_code == 422
    assert pointers(refused.get_json()) == ["/vehicle_id"]


def test_an_unknown_vehicle_is_404_at_every_door(call):
    for method, path, body in (
        ("GET", "/vehicles/none", None),
        ("GET", "/vehicles/none/runs", None),
        ("GET", "/vehicles/none/calibrations", None),
        ("GET", "/vehicles/none/maintenance", None),
        ("GET", "/vehicles/none/evaluations", None),
        ("GET", "/vehicles/none/parameters", None),
        ("POST", "/vehicles/none/calibrations", ENTERED),
        ("POST", "/vehicles/none/boots", {"calibration_number": 1}),
        ("POST", "/vehicles/none/maintenance", {"done_at": "2026-02-01T08:00:00Z", "kind": "other"}),
    ):
        told = call.problem(404, method, path, body=body)
        assert told["type"] == "/problems/not-found", path


def test_the_fleet_is_paged_newest_first(call):
    for number in range(9, 14):
        call.ok("PUT", f"/vehicles/LC-{number:02}", body=VEHICLE)
    seen, after = [], ""
    while after is not None:
        page = call.ok("GET", f"/vehicles?limit=3{after and f'&after={after}'}")
        seen += [item["vehicle_id"] for item in page["items"]]
        after = page["after"]
        assert len(page["items"]) <= 3
    assert seen == [f"LC-{number:02}" for number in range(13, 6, -1)]


def test_a_fleet_that_fits_has_no_page_after(call):
    assert call.ok("GET", "/vehicles?limit=2")["after"] is None


def test_the_overview_says_what_is_in_force_and_what_it_drives_on(call, in_force):
    digest = call.ok("GET", "/vehicles/LC-07/parameters", "LC-07")["digest"]
    call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"digest": digest, "source": "fetched"})
    call.ok("POST", "/vehicles/LC-08/boots", "LC-08", {"calibration_number": 4, "source": "kept"})
    listed = {item["vehicle_id"]: item["overview"] for item in call.ok("GET", "/vehicles")["items"]}
    assert listed["LC-07"] == call.ok("GET", "/vehicles/LC-07")["overview"]
    assert listed["LC-08"] == call.ok("GET", "/vehicles/LC-08")["overview"]
    assert listed["LC-07"]["in_force"]["calibration_id"] == in_force["calibration_id"]
    assert listed["LC-07"]["in_force"]["calibration_number"] == 1
    assert listed["LC-07"]["drives_on"]["calibration_number"] == 1
    assert listed["LC-07"]["drives_on"]["matched"] is True
    assert listed["LC-07"]["open_alerts"] == 0
    assert listed["LC-08"]["in_force"] is None
    assert listed["LC-08"]["drives_on"]["matched"] is False
    assert listed["LC-08"]["open_alerts"] == 1
