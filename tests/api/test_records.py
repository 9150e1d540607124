"""Boots, maintenance, evaluations, alerts and the journal at their doors."""

from datetime import timedelta
from itertools import pairwise

import pytest

from registry.procedures.evaluation import evaluate_vehicle

from .calling import ENTERED, VEHICLE, pointers, record_runs


def test_a_boot_on_what_is_not_in_force_raises_an_alert_at_once(call, in_force):
    booted = call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"calibration_number": 7, "source": "kept", "age_s": 90})
    assert booted["matched"] is False
    assert booted["booted_at"] == "2026-03-02T08:30:15.250000Z"
    (alert,) = call.ok("GET", "/alerts?vehicle_id=LC-07", "reader")["items"]
    assert alert["kind"] == "boot_mismatch"
    assert alert["standing"] == "unacknowledged"
    assert alert["priority"] == "high"
    assert alert["history"][0]["content"]["message"] == alert["message"]
    assert call.ok("GET", "/alerts?vehicle_id=LC-08")["items"] == []


def test_an_alert_is_acknowledged_once_and_closed_by_evidence(call, in_force):
    call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"calibration_number": 7})
    (alert,) = call.ok("GET", "/alerts")["items"]
    path = f"/alerts/{alert['alert_id']}/acknowledgement"
    seen = call.ok("POST", path, "technician", {"note": "sent someone"})
    assert seen["standing"] == "acknowledged"
    assert seen["history"][-1]["note"] == "sent someone"
    assert seen["history"][-1]["by"] == "technician"
    call.problem(409, "POST", path, "technician", {"note": "again"})
    call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"calibration_number": 1})
    assert call.ok("GET", "/alerts")["items"] == []
    (closed,) = call.ok("GET", "/alerts?standing=all")["items"]
    assert closed["standing"] == "closed"


def test_a_note_is_optional_but_the_body_is_an_object(call, in_force):
    call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"calibration_number": 7})
    (alert,) = call.ok("GET", "/alerts")["items"]
    path = f"/alerts/{alert['alert_id']}/acknowledgement"
    call.problem(400, "POST", path, "technician")
    assert pointers(call.problem(422, "POST", path, "technician", {"note": 5})) == ["/note"]
    assert call.ok("POST", path, "technician", {})["standing"] == "acknowledged"


def test_an_unknown_alert_is_404(call):
    call.problem(404, "POST", "/alerts/none/acknowledgement", body={"note": None})


@pytest.mark.parametrize(
    ("body", "places"),
    [
        ({}, ["/calibration_number"]),
        ({"calibration_number": "1"}, ["/calibration_number"]),
        ({"calibration_number": 1.0}, ["/calibration_number"]),
        ({"calibration_number": 10**30}, ["/calibration_number"]),
        ({"digest": "abc"}, ["/digest"]),
        ({"digest": "A" * 64}, ["/digest"]),
        ({"calibration_number": 1, "source": "guessed"}, ["/source"]),
        ({"calibration_number": 1, "booted_at": "2026-03-02T08:00:00"}, ["/booted_at"]),
        ({"calibration_number": 1, "booted_at": "2026-03-03T08:00:00Z"}, ["/booted_at"]),
        ({"calibration_number": 1, "age_s": -1}, ["/age_s"]),
        ({"calibration_number": 1, "software": "x" * 201}, ["/software"]),
        ({"calibration_number": 1, "tag": "x"}, ["/tag"]),
    ],
)
def test_a_boot_that_does_not_fit_is_refused_and_raises_nothing(call, in_force, body, places):
    assert pointers(call.problem(422, "POST", "/vehicles/LC-07/boots", "LC-07", body)) == places
    assert call.ok("GET", "/vehicles/LC-07")["overview"]["drives_on"] is None
    assert call.ok("GET", "/alerts?standing=all")["items"] == []


def test_maintenance_says_whether_it_ends_the_window(call):
    for kind, ends in (("part_fitted", True), ("towed", False)):
        body = {"done_at": "2026-03-01T10:00:00+02:00", "kind": kind, "side": None, "note": "bay 3"}
        response = call("POST", "/vehicles/LC-07/maintenance", "technician", body)
        assert response.status_code == 201
        made = response.get_json()
        assert made["ends_window"] is ends
        assert made["done_at"] == "2026-03-01T08:00:00Z"
        assert made["recorded_by"] == "technician"
    kinds = [item["kind"] for item in call.ok("GET", "/vehicles/LC-07/maintenance", "reader")["items"]]
    assert kinds == ["towed", "part_fitted"]


@pytest.mark.parametrize(
    ("body", "places"),
    [
        ({"kind": "towed"}, ["/done_at"]),
        ({"done_at": "2026-03-01T10:00:00Z"}, ["/kind"]),
        ({"done_at": "2026-03-01T10:00:00Z", "kind": "washed"}, ["/kind"]),
        ({"done_at": "2026-03-01T10:00:00Z", "kind": "towed", "side": "front"}, ["/side"]),
        ({"done_at": "2026-03-01T10:00:00", "kind": "towed"}, ["/done_at"]),
        ({"done_at": "2026-04-01T10:00:00Z", "kind": "towed"}, ["/done_at"]),
        ({"done_at": "2026-03-01T10:00:00Z", "kind": "towed", "note": "\u0000"}, ["/note"]),
    ],
)
def test_maintenance_that_does_not_fit_is_refused(call, body, places):
    assert pointers(call.problem(422, "POST", "/vehicles/LC-07/maintenance", body=body)) == places
    assert call.ok("GET", "/vehicles/LC-07/maintenance")["items"] == []


def test_an_evaluation_is_shown_with_deviation_and_finding(call, services, clock, in_force):
    record_runs(call, clock.move(days=1))
    done = evaluate_vehicle(services, "LC-07", clock.time)
    assert done is not None
    (shown,) = call.ok("GET", "/vehicles/LC-07/evaluations", "reader")["items"]
    assert shown["as_of"] == "2026-03-03T08:30:15.250000Z"
    assert shown["finding"] == done.result.finding
    assert shown["message"] == done.result.message
    for name, found in zip(("tick_factor", "side_ratio", "width"), done.result.quantities(), strict=True):
        expected = None if found.deviation is None else pytest.approx(100 * found.deviation)
        assert shown[name]["deviation_percent"] == expected
        assert shown[name]["observed"] is found.observed
    used = call.ok("GET", "/vehicles/LC-07")["overview"]["tolerance_used_percent"]
    width = shown["width"]["deviation_percent"]
    assert used["width"] == pytest.approx(100 * abs(width) / VEHICLE["tolerance"]["width_percent"])


def test_the_journal_is_filtered_and_paged(call, clock, in_force):
    clock.move(days=1)
    call.ok("POST", "/vehicles/LC-08/calibrations", "technician", ENTERED)
    everything = call.ok("GET", "/journal", "reader")["items"]
    assert [item["entry"] for item in everything] == list(range(len(everything), 0, -1))
    for newer, older in pairwise(everything):
        assert newer["previous_hash"] == older["hash"]
    by_vehicle = call.ok("GET", "/journal?vehicle_id=LC-08&person=technician")["items"]
    assert [item["vehicle_id"] for item in by_vehicle] == ["LC-08"]
    action = by_vehicle[0]["action"]
    assert {item["action"] for item in call.ok("GET", f"/journal?action={action}")["items"]} == {action}
    late = call.ok("GET", "/journal?from=2026-03-03T00:00:00Z")["items"]
    assert [item["entry"] for item in late] == [everything[0]["entry"]]
    early = call.ok("GET", "/journal?to=2026-03-03T00:00:00Z")["items"]
    assert early == everything[1:]
    first = call.ok("GET", "/journal?limit=2")
    second = call.ok("GET", f"/journal?limit=2&after={first['after']}")
    assert first["items"] + second["items"] == everything[:4]


@pytest.mark.parametrize(
    ("path", "place"),
    [
        ("/vehicles?page=2", "/page"),
        ("/vehicles?limit=0", "/limit"),
        ("/vehicles?limit=1001", "/limit"),
        ("/vehicles?limit=ten", "/limit"),
        ("/vehicles?limit=1&limit=2", "/limit"),
        ("/vehicles?after=a%20b", "/after"),
        ("/vehicles?after=abcd", "/after"),
        ("/vehicles/LC-07?verbose=1", "/verbose"),
        ("/vehicles/LC-07/runs?standing=open", "/standing"),
        ("/vehicles/LC-07/calibrations?after=abcd", "/after"),
        ("/vehicles/LC-07/maintenance?after=abcd", "/after"),
        ("/vehicles/LC-07/evaluations?limit=-1", "/limit"),
        ("/vehicles/LC-07/parameters?when=now", "/when"),
        ("/vehicles/LC-07/parameters?at=2026-03-01T00:00:00Z&at=2026-03-01T00:00:00Z", "/at"),
        ("/alerts?standing=closed", "/standing"),
        ("/alerts?vehicle_id=a%20b", "/vehicle_id"),
        ("/journal?from=yesterday", "/from"),
        ("/journal?from_=2026-03-01T00:00:00Z", "/from_"),
        ("/journal?entry=1", "/entry"),
        ("/journal?person=%00", "/person"),
        ("/journal?action=", "/action"),
    ],
)
def test_a_query_parameter_that_does_not_fit_is_refused(call, path, place):
    assert pointers(call.problem(422, "GET", path)) == [place]


def test_an_unknown_query_parameter_is_refused_where_something_would_be_stored_too(call):
    told = call.problem(422, "POST", "/vehicles/LC-07/calibrations?dry_run=1", body=ENTERED)
    assert pointers(told) == ["/dry_run"]
    assert call.ok("GET", "/vehicles/LC-07/calibrations")["items"] == []


def test_a_token_of_another_collection_is_refused_or_continues_nothing_false(call, clock):
    for day in range(3):
        done_at = (clock.time - timedelta(days=day)).isoformat()
        call.ok("POST", "/vehicles/LC-07/maintenance", body={"done_at": done_at, "kind": "other"})
    token = call.ok("GET", "/vehicles/LC-07/maintenance?limit=1")["after"]
    assert pointers(call.problem(422, "GET", f"/vehicles?after={token}")) == ["/after"]
