"""Calibrations are proposed from runs or entered, put into force, and taken back with a word on what holds next."""

from datetime import timedelta

import pytest

from .calling import ENTERED, LEFT_MM, RIGHT_MM, WIDTH_MM, pointers, run


def propose(call, body=ENTERED, vehicle_id="LC-07"):
    return call.ok("POST", f"/vehicles/{vehicle_id}/calibrations", "technician", body)


def adopt(call, calibration, **more):
    path = f"/calibrations/{calibration['calibration_id']}/adoption"
    return call.ok("POST", path, "approver", {"reason": "it fits"} | more)


def test_a_baseline_recovers_the_truth_and_says_how_well(call, calibration_runs):
    made = propose(call, {"kind": "baseline", "run_ids": None, "note": "spring"})
    assert made["standing"] == "proposed"
    assert made["kind"] == "baseline"
    assert made["number"] == 1
    assert made["note"] == "spring"
    assert made["observed"] == {"tick_factor": True, "side_ratio": True, "width": True}
    assert made["runs_used"] == len(made["runs"]) == len(calibration_runs)
    for name, truth in (("left_mm_per_tick", LEFT_MM), ("right_mm_per_tick", RIGHT_MM), ("width_mm", WIDTH_MM)):
        assert abs(made[name]["value"] - truth) < 4 * made[name]["u"], name
        assert made[name]["u"] < 0.001 * truth
    assert made["tick_factor_mm_per_tick"]["value"] == pytest.approx(
        (made["left_mm_per_tick"]["value"] + made["right_mm_per_tick"]["value"]) / 2
    )
    assert made["side_ratio_percent"]["value"] == pytest.approx(
        100 * (made["right_mm_per_tick"]["value"] / made["left_mm_per_tick"]["value"] - 1)
    )
    assert made["in_force_from"] is None
    assert call.ok("GET", f"/calibrations/{made['calibration_id']}", "reader") == made


def test_uncertainties_follow_from_the_covariance(call):
    made = propose(call)
    relative = made["covariance_relative"]
    for index, name in enumerate(("left_mm_per_tick", "right_mm_per_tick", "width_mm")):
        assert made[name]["value"] == ENTERED[name]
        assert made[name]["u"] == pytest.approx(ENTERED["u"][name])
        assert relative[index][index] ** 0.5 * made[name]["value"] == pytest.approx(made[name]["u"])
    u_left, u_right = (ENTERED["u"][name] for name in ("left_mm_per_tick", "right_mm_per_tick"))
    # Entered sides are independent: the mean's variance is a quarter of the sum, the ratio's the relative sum.
    assert made["tick_factor_mm_per_tick"]["u"] == pytest.approx((u_left**2 + u_right**2) ** 0.5 / 2)
    ratio = ENTERED["right_mm_per_tick"] / ENTERED["left_mm_per_tick"]
    expected = (
        100
        * ratio
        * ((u_left / ENTERED["left_mm_per_tick"]) ** 2 + (u_right / ENTERED["right_mm_per_tick"]) ** 2) ** 0.5
    )
    assert made["side_ratio_percent"]["u"] == pytest.approx(expected)


def test_runs_that_do_not_settle_everything_are_not_observed(call, clock):
    for index in range(3):
        started_at = clock.time - timedelta(hours=2 + index)
        call.ok("POST", "/vehicles/LC-07/runs", body=run("straight-a", started_at, jitter_mm=index - 1.0))
    told = call.problem(422, "POST", "/vehicles/LC-07/calibrations", body={"kind": "baseline", "run_ids": None})
    assert told["type"] == "/problems/not-observed"
    assert [error["pointer"].lstrip("/") for error in told["errors"]] == ["width"]
    assert told["errors"][0]["detail"]
    assert call.ok("GET", "/vehicles/LC-07/calibrations")["items"] == []


def test_a_baseline_of_no_runs_is_refused(call):
    told = call.problem(422, "POST", "/vehicles/LC-07/calibrations", body={"kind": "baseline", "run_ids": None})
    assert told["detail"]


def test_a_baseline_may_name_its_runs(call, calibration_runs):
    chosen = [one["run_id"] for one in calibration_runs[:6]]
    made = propose(call, {"kind": "baseline", "run_ids": chosen})
    assert {one["run_id"] for one in made["runs"]} == set(chosen)


def test_a_baseline_of_an_unknown_run_is_refused(call, calibration_runs):
    body = {"kind": "baseline", "run_ids": [calibration_runs[0]["run_id"], "none"]}
    refused = call("POST", "/vehicles/LC-07/calibrations", body=body)
    assert 400 <= refused.status_code < 500
    assert "none" in refused.get_data(as_text=True)


@pytest.mark.parametrize(
    ("body", "places"),
    [
        ({}, ["/kind"]),
        ({"kind": "evaluation"}, ["/kind"]),
        ({"kind": "baseline", "run_ids": "all"}, ["/run_ids"]),
        ({"kind": "baseline", "run_ids": [1]}, ["/run_ids/0"]),
        ({"kind": "baseline", "width_mm": 600}, ["/width_mm"]),
        ({"kind": "entered"}, ["/left_mm_per_tick", "/right_mm_per_tick", "/width_mm", "/u"]),
        (ENTERED | {"run_ids": None}, ["/run_ids"]),
        (ENTERED | {"width_mm": None}, ["/width_mm"]),
        (ENTERED | {"width_mm": 0}, ["/width_mm"]),
        (ENTERED | {"width_mm": -600}, ["/width_mm"]),
        (ENTERED | {"left_mm_per_tick": "0.35"}, ["/left_mm_per_tick"]),
        (ENTERED | {"u": {"left_mm_per_tick": 0.0001, "right_mm_per_tick": 0.0001}}, ["/u/width_mm"]),
        (ENTERED | {"u": ENTERED["u"] | {"width_mm": 0}}, ["/u/width_mm"]),
        (ENTERED | {"u": ENTERED["u"] | {"width_m": 1}}, ["/u/width_m"]),
        (ENTERED | {"number": 3}, ["/number"]),
    ],
)
def test_a_calibration_that_does_not_fit_its_kind_is_refused(call, body, places):
    told = call.problem(422, "POST", "/vehicles/LC-07/calibrations", body=body)
    assert pointers(told) == places
    assert call.ok("GET", "/vehicles/LC-07/calibrations")["items"] == []


def test_adoption_puts_into_force_from_the_whole_second(call, clock):
    made = adopt(call, propose(call), number=1)
    assert made["standing"] == "in force"
    assert made["in_force_from"] == "2026-03-02T08:30:15Z"
    assert made["in_force_to"] is None


def test_the_one_before_is_superseded(call, clock):
    first = adopt(call, propose(call))
    clock.move(days=1)
    second = adopt(call, propose(call, ENTERED | {"width_mm": 621}))
    before = call.ok("GET", f"/calibrations/{first['calibration_id']}")
    assert before["standing"] == "superseded"
    assert before["in_force_to"] == second["in_force_from"]
    listed = call.ok("GET", "/vehicles/LC-07/calibrations")["items"]
    assert [one["number"] for one in listed] == [2, 1]


def test_an_adoption_that_another_overtook_is_409(call):
    one, other = propose(call), propose(call, ENTERED | {"width_mm": 621})
    adopt(call, one)
    told = call.problem(409, "POST", f"/calibrations/{other['calibration_id']}/adoption", body={"reason": "late"})
    assert told["type"] == "/problems/conflict"
    call.problem(409, "POST", f"/calibrations/{one['calibration_id']}/adoption", body={"reason": "twice"})


@pytest.mark.parametrize(
    ("body", "places"),
    [
        ({}, ["/reason"]),
        ({"reason": ""}, ["/reason"]),
        ({"reason": "  "}, ["/reason"]),
        ({"reason": "r", "in_force_from": "2026-03-03T00:00:00Z"}, ["/in_force_from"]),
        ({"reason": "r", "in_force_from": "2026-03-01T00:00:00"}, ["/in_force_from"]),
        ({"reason": "r", "number": 0}, ["/number"]),
        ({"reason": "r", "number": 1.5}, ["/number"]),
        ({"reason": "r", "number": True}, ["/number"]),
        ({"reason": "r", "force": True}, ["/force"]),
    ],
)
def test_an_adoption_that_does_not_fit_is_refused(call, body, places):
    made = propose(call)
    told = call.problem(422, "POST", f"/calibrations/{made['calibration_id']}/adoption", body=body)
    assert pointers(told) == places
    assert call.ok("GET", f"/calibrations/{made['calibration_id']}")["standing"] == "proposed"


def test_a_number_that_is_not_the_calibrations_own_is_refused(call):
    made = propose(call)
    refused = call("POST", f"/calibrations/{made['calibration_id']}/adoption", body={"reason": "r", "number": 2})
    assert refused.status_code in (409, 422)
    assert pointers(refused.get_json()) == ["/number"]


def test_a_time_before_that_of_the_one_in_force_is_refused(call, clock):
    adopt(call, propose(call))
    clock.move(days=1)
    other = propose(call)
    body = {"reason": "r", "in_force_from": "2026-03-02T08:00:00Z"}
    told = call.problem(422, "POST", f"/calibrations/{other['calibration_id']}/adoption", body=body)
    assert pointers(told) == ["/in_force_from"]


def test_withdrawal_with_nothing_leaves_nothing_in_force_and_names_who_loaded_it(call, in_force):
    call.ok("POST", "/vehicles/LC-07/boots", "LC-07", {"calibration_number": 1})
    path = f"/calibrations/{in_force['calibration_id']}/withdrawal"
    done = call.ok("POST", path, "approver", {"reason": "tape was wrong", "then": "nothing"})
    assert done["calibration"]["standing"] == "withdrawn"
    assert done["in_force"] is None
    assert done["loaded_by"] == ["LC-07"]
    told = call.problem(404, "GET", "/vehicles/LC-07/parameters", "LC-07")
    assert told["type"] == "/problems/nothing-in-force"
    assert told["withdrawn_numbers"] == [1]
    call.problem(409, "POST", path, body={"reason": "again", "then": "nothing"})


def test_withdrawal_may_reinstate_an_earlier_one_under_a_new_number(call, clock, in_force):
    clock.move(days=1)
    bad = adopt(call, propose(call, ENTERED | {"width_mm": 700}))
    body = {"reason": "tape was wrong", "then": "reinstate", "number": 1}
    done = call.ok("POST", f"/calibrations/{bad['calibration_id']}/withdrawal", body=body)
    assert done["in_force"]["kind"] == "reinstated"
    assert done["in_force"]["number"] == 3
    assert done["in_force"]["width_mm"] == in_force["width_mm"]
    assert call.ok("GET", "/vehicles/LC-07/parameters", "LC-07")["calibration_number"] == 3


@pytest.mark.parametrize(
    ("body", "places"),
    [
        ({"reason": "r"}, ["/then"]),
        ({"reason": "r", "then": "later"}, ["/then"]),
        ({"then": "nothing"}, ["/reason"]),
        ({"reason": "r", "then": "reinstate"}, ["/number"]),
        ({"reason": "r", "then": "nothing", "number": 1}, ["/number"]),
    ],
)
def test_a_withdrawal_that_does_not_fit_is_refused(call, in_force, body, places):
    told = call.problem(422, "POST", f"/calibrations/{in_force['calibration_id']}/withdrawal", body=body)
    assert pointers(told) == places
    assert call.ok("GET", f"/calibrations/{in_force['calibration_id']}")["standing"] == "in force"


def test_a_vehicle_cannot_reinstate_what_was_never_in_force(call, in_force):
    body = {"reason": "r", "then": "reinstate", "number": 9}
    call.problem(409, "POST", f"/calibrations/{in_force['calibration_id']}/withdrawal", body=body)


def test_an_unknown_calibration_is_404(call):
    call.problem(404, "GET", "/calibrations/none")
    call.problem(404, "POST", "/calibrations/none/adoption", body={"reason": "r"})
    call.problem(404, "POST", "/calibrations/none/withdrawal", body={"reason": "r", "then": "nothing"})
