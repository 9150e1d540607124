from __future__ import annotations

import json
import re
from collections.abc import Callable

import pytest

from registry.procedures import people
from registry.services import Services
from registry.storage import alerts, calibrations, maintenance, runs
from tests.web.conftest import Visitor
from tests.web.yard import KEEPER, Yard

Visits = Callable[[str], Visitor]

ENTERED = {
    "kind": "provisional",
    "left_mm_per_tick": "0.3477",
    "right_mm_per_tick": "0,3479",
    "width_mm": "620.5",
    "u_left_mm_per_tick": "0.001",
    "u_right_mm_per_tick": "0.001",
    "u_width_mm": "6",
    "note": "",
}


def pages_of(yard: Yard) -> list[str]:
    return [
        "/",
        "/alerts",
        "/alerts?standing=all",
        "/journal",
        "/vehicles/tub-7",
        "/vehicles/tub-8",
        f"/runs/{yard.run.run_id}",
        f"/calibrations/{yard.in_force.calibration_id}",
        f"/calibrations/{yard.proposal.calibration_id}",
    ]


def flat(text: str) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text))


@pytest.mark.parametrize("name", ["Rea", "Tove", "Abel", "Kim"])
def test_every_page_opens_for_every_role_with_one_h1_and_nothing_inline(visitor: Visits, yard: Yard, name: str) -> None:
    one = visitor(name)
    for path in pages_of(yard):
        text = one.text(path)
        assert text.count("<h1>") == 1, path
        assert not re.search(r"<script(?![^>]*\bsrc=)", text), path
        assert not re.search(r'\sstyle="|\son[a-z]+="', text), path


def test_ids_on_a_page_are_unique(visitor: Visits, yard: Yard) -> None:
    abel = visitor("Abel")
    for path in pages_of(yard):
        ids = re.findall(r'\sid="([^"]+)"', abel.text(path))
        assert len(ids) == len(set(ids)), path


def test_the_fleet_is_grouped_by_how_soon_something_is_to_be_done(visitor: Visits) -> None:
    text = visitor("Rea").text("/")
    assert "2 vehicles ask for something: 1 before it drives, 1 this shift." in flat(text)
    assert text.index("Before it drives") < text.index("Ore tub 8") < text.index("This shift") < text.index("Ore tub 7")


def test_the_fleet_shows_strips_and_words_without_any_script(visitor: Visits) -> None:
    text = visitor("Rea").text("/")
    assert "<script" not in text
    assert text.count('class="gauge gauge-') == 6
    assert 'class="gauge gauge-beyond"' in text
    assert "beyond tolerance: falls short 58 mm in 10 m" in flat(text)
    assert "these runs cannot tell" in text
    assert "not evaluated yet" in text


def test_the_vehicle_page_begins_with_what_to_do_and_what_it_drives_on(visitor: Visits) -> None:
    text = flat(visitor("Rea").text("/vehicles/tub-7"))
    assert "This shift: Drive calibration runs and propose a new baseline." in text
    assert "Calibration 2 since 2026-01-01, questioned." in text


def test_a_reader_is_shown_no_form_but_signing_out(visitor: Visits, yard: Yard) -> None:
    rea = visitor("Rea")
    for path in pages_of(yard):
        assert re.findall(r'<form[^>]*action="([^"]*)"', rea.text(path)) == ["/sign-out"], path


def test_a_technician_is_not_shown_the_decision(visitor: Visits) -> None:
    text = visitor("Tove").text("/vehicles/tub-7")
    assert "/baseline" in text
    assert "/adoption" not in text


def test_what_a_page_does_not_show_is_refused_when_sent_anyway(visitor: Visits, yard: Yard, services: Services) -> None:
    tove = visitor("Tove")
    path = f"/calibrations/{yard.proposal.calibration_id}"
    response = tove.post(f"{path}/adoption", path, reason="I like it")
    assert response.status_code == 422
    assert visitor("Rea").post("/vehicles/tub-8/entered", "/", **ENTERED).status_code == 422
    with services.read() as c:
        assert calibrations.by_id(c, yard.proposal.calibration_id).standing == "proposed"
        assert calibrations.all_for(c, "tub-8") == []


def test_an_approver_puts_a_proposal_into_force_with_a_reason(visitor: Visits, yard: Yard, services: Services) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.proposal.calibration_id}"
    text = flat(abel.text(path))
    assert "then on calibration 2, now in force, the vehicle drives true to length, drives straight and turns" in text
    assert "They are not a safety function" in text
    response = abel.post(f"{path}/adoption", path, reason="the runs agree", in_force_from="")
    assert (response.status_code, response.location) == (303, "/vehicles/tub-7")
    assert "Calibration 3 is in force." in abel.text("/vehicles/tub-7")
    with services.read() as c:
        assert calibrations.by_id(c, yard.proposal.calibration_id).standing == "in force"


def test_a_decision_without_a_reason_comes_back_with_what_was_typed(visitor: Visits, yard: Yard) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.proposal.calibration_id}"
    response = abel.post(f"{path}/adoption", path, reason="", in_force_from="2026-02-28T10:00")
    text = response.get_data(as_text=True)
    assert response.status_code == 422
    assert "Write something here." in text
    assert 'value="2026-02-28T10:00"' in text


def test_a_time_ahead_is_refused_beside_its_field(visitor: Visits, yard: Yard) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.proposal.calibration_id}"
    text = abel.post(f"{path}/adoption", path, reason="x", in_force_from="2040-01-01T00:00").get_data(as_text=True)
    assert re.search(r'class="error" id="adoption-in_force_from-error">[^<]*lies ahead of the present', text)


def test_adopting_twice_says_what_holds(visitor: Visits, yard: Yard) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.proposal.calibration_id}"
    token = abel.token(path)
    fields = {"csrf_token": token, "reason": "twice"}
    assert abel.client.post(f"{path}/adoption", data=fields).status_code == 303
    again = abel.client.post(f"{path}/adoption", data=fields)
    assert again.status_code == 422
    assert "calibration 3 is in force already" in flat(again.get_data(as_text=True))


def test_withdrawing_can_bring_an_earlier_calibration_back(visitor: Visits, yard: Yard, services: Services) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.in_force.calibration_id}"
    fields = {"reason": "read the wrong mark", "then": "reinstate", "number": "1"}
    assert abel.post(f"{path}/withdrawal", path, **fields).status_code == 303
    text = flat(abel.text("/vehicles/tub-7"))
    assert "Calibration 2 is withdrawn. Calibration 4 is in force now. Loaded by: tub-7." in text
    with services.read() as c:
        assert calibrations.by_number(c, "tub-7", 4).result.kind == "reinstated"


def test_withdrawing_with_nothing_in_its_place_leaves_nothing(visitor: Visits, yard: Yard) -> None:
    abel, path = visitor("Abel"), f"/calibrations/{yard.in_force.calibration_id}"
    assert abel.post(f"{path}/withdrawal", path, reason="wrong", then="nothing", number="1").status_code == 303
    assert "Nothing is in force now." in abel.text("/vehicles/tub-7")


def test_provisional_values_are_proposed_by_hand_with_point_or_comma(visitor: Visits, services: Services) -> None:
    tove = visitor("Tove")
    response = tove.post("/vehicles/tub-8/entered", "/vehicles/tub-8", **ENTERED)
    assert response.status_code == 303
    with services.read() as c:
        (made,) = calibrations.all_for(c, "tub-8")
    assert made.result.parameters.as_tuple() == pytest.approx((0.0003477, 0.0003479, 0.6205))
    assert (made.result.kind, made.recorded_by) == ("provisional", "Tove")


@pytest.mark.parametrize(
    ("field", "typed", "said"),
    [
        ("left_mm_per_tick", "abc", "Write a number with a decimal point"),
        ("width_mm", "-3", "Write a number above 0."),
        ("u_width_mm", "inf", "Write a number above 0."),
        ("right_mm_per_tick", "", "Write a number."),
    ],
)
def test_a_value_that_is_none_is_refused_beside_its_field(
    visitor: Visits, services: Services, field: str, typed: str, said: str
) -> None:
    response = visitor("Tove").post("/vehicles/tub-8/entered", "/vehicles/tub-8", **{**ENTERED, field: typed})
    text = response.get_data(as_text=True)
    assert response.status_code == 422
    assert re.search(rf'id="entered-{field}-error">[^<]*{re.escape(said)}', text)
    kept = re.search(rf'<input [^>]*name="{field}"[^>]*>', text)
    assert kept
    assert f'value="{typed}"' in kept.group(0)
    with services.read() as c:
        assert calibrations.all_for(c, "tub-8") == []


def test_a_baseline_that_the_runs_do_not_determine_says_which_run_would(visitor: Visits) -> None:
    response = visitor("Tove").post("/vehicles/tub-8/baseline", "/vehicles/tub-8", note="")
    text = flat(response.get_data(as_text=True))
    assert response.status_code == 422
    assert "the runs do not determine every quantity that a baseline needs" in text
    assert "turn on the spot three or more whole turns" in text


def test_maintenance_is_recorded_and_says_what_it_ends(visitor: Visits, services: Services) -> None:
    tove = visitor("Tove")
    fields = {"kind": "part_fitted", "side": "left", "done_at": "2026-03-02T08:00", "note": "new track"}
    assert tove.post("/vehicles/tub-7/maintenance", "/vehicles/tub-7", **fields).status_code == 303
    assert "Its parameters are questioned until a new calibration." in tove.text("/vehicles/tub-7")
    with services.read() as c:
        made = maintenance.all_for(c, "tub-7")[-1]
    assert (made.kind, made.side, made.note, made.recorded_by) == ("part_fitted", "left", "new track", "Tove")
    assert made.done_at.isoformat() == "2026-03-02T08:00:00+00:00"


def test_maintenance_ahead_is_refused_beside_its_field(visitor: Visits) -> None:
    fields = {"kind": "towed", "side": "", "done_at": "2030-01-01T00:00"}
    response = visitor("Tove").post("/vehicles/tub-7/maintenance", "/vehicles/tub-7", **fields)
    assert response.status_code == 422
    assert 'id="maintenance-done_at-error"' in response.get_data(as_text=True)


def test_an_alert_is_acknowledged_with_a_note_and_stays_while_it_holds(
    visitor: Visits, yard: Yard, services: Services
) -> None:
    tove = visitor("Tove")
    response = tove.post(f"/alerts/{yard.alert.alert_id}/acknowledgement", "/alerts", note="tracks look worn")
    assert response.status_code == 303
    text = flat(tove.text("/alerts"))
    assert "Acknowledged, still holds." in text
    assert "tracks look worn" in text
    with services.read() as c:
        assert alerts.by_id(c, yard.alert.alert_id).standing == "acknowledged"


def test_acknowledging_twice_says_what_stands(visitor: Visits, yard: Yard) -> None:
    tove, path = visitor("Tove"), f"/alerts/{yard.alert.alert_id}/acknowledgement"
    fields = {"csrf_token": tove.token("/alerts"), "note": "seen"}
    assert tove.client.post(path, data=fields).status_code == 303
    again = tove.client.post(path, data=fields)
    assert again.status_code == 422
    assert '<div class="wrong" role="alert">' in again.get_data(as_text=True)


def test_a_form_sent_after_the_session_ended_leads_to_the_sign_in_page(visitor: Visits) -> None:
    tove = visitor("Tove")
    token = tove.token("/alerts")
    with tove.client.session_transaction() as session:
        del session["_user_id"]
    response = tove.client.post("/vehicles/tub-7/baseline", data={"csrf_token": token})
    assert (response.status_code, response.location) == (303, "/sign-in")


def test_acknowledging_needs_a_note(visitor: Visits, yard: Yard, services: Services) -> None:
    response = visitor("Tove").post(f"/alerts/{yard.alert.alert_id}/acknowledgement", "/alerts", note="")
    assert response.status_code == 422
    assert "Write something here." in response.get_data(as_text=True)
    with services.read() as c:
        assert alerts.by_id(c, yard.alert.alert_id).standing == "unacknowledged"


def test_alerts_are_grouped_by_the_time_to_act_within(visitor: Visits) -> None:
    text = flat(visitor("Rea").text("/alerts"))
    assert "1 alert: 1 this shift." in text
    assert "The tick factor is 0.58 % below the calibration in force. The vehicle falls short 58 mm in 10 m." in text
    assert visitor("Rea").get("/alerts?standing=some").status_code == 404


def test_the_run_page_tells_the_closing_error_by_each_set_of_parameters(visitor: Visits, yard: Yard) -> None:
    text = flat(visitor("Rea").text(f"/runs/{yard.run.run_id}"))
    assert "Closing error by the parameters in force when driven (number 2): 159 mm from the mark" in text
    assert "Start mark A End mark B Surface concrete" in text


def test_a_run_is_set_aside_and_restored_with_reasons(visitor: Visits, yard: Yard, services: Services) -> None:
    abel, path = visitor("Abel"), f"/runs/{yard.run.run_id}"
    assert abel.post(f"{path}/set-aside", path, reason="wheel over a joint").status_code == 303
    text = flat(abel.text(path))
    assert "Set aside: set aside by Abel: wheel over a joint." in text
    assert abel.post(f"{path}/restoration", path, reason="it was another run").status_code == 303
    with services.read() as c:
        assert [state.use for state in runs.states(c, yard.run.run_id)] == ["usable", "set aside", "usable"]


def test_setting_a_run_aside_needs_a_reason(visitor: Visits, yard: Yard, services: Services) -> None:
    path = f"/runs/{yard.run.run_id}"
    assert visitor("Tove").post(f"{path}/set-aside", path, reason=" ").status_code == 422
    with services.read() as c:
        assert runs.by_id(c, yard.run.run_id).use == "usable"


def test_the_calibration_page_shows_values_with_u_and_interval_and_who_supplied_them(
    visitor: Visits, yard: Yard
) -> None:
    text = flat(visitor("Rea").text(f"/calibrations/{yard.proposal.calibration_id}"))
    assert "Effective width 621.20 0.31 mm 620.59 to 621.81 the calibration before: these runs cannot tell" in text
    assert "Correlations: left and right 0.25, left and width 0.00, right and width 0.00." in text


def test_parameters_are_downloaded_as_a_file_to_carry(visitor: Visits, services: Services) -> None:
    people.issue_key(services, KEEPER, vehicle_id="tub-7")
    rea = visitor("Rea")
    assert '<a href="/vehicles/tub-7/parameters.txt" download>' in rea.text("/vehicles/tub-7")
    response = rea.get("/vehicles/tub-7/parameters.txt")
    assert response.headers["Content-Disposition"] == 'attachment; filename="tub-7-parameters.txt"'
    assert response.get_data(as_text=True).startswith("VEHICLE_ID=tub-7\nCALIBRATION_NUMBER=2\n")


def test_without_a_key_the_download_says_what_to_do(visitor: Visits) -> None:
    response = visitor("Rea").get("/vehicles/tub-7/parameters.txt")
    assert response.status_code == 409
    assert "issue one for it first" in response.get_data(as_text=True)


def test_the_journal_tells_who_did_what(visitor: Visits) -> None:
    text = flat(visitor("Rea").text("/journal"))
    assert "Tove maintenance tub-7" in text
    assert "reason after tensioning" in text


@pytest.mark.parametrize(
    "path", ["/vehicles/none", "/runs/none", "/calibrations/none", "/nothing", "/vehicles/tub-7/history/height.json"]
)
def test_what_is_not_in_the_book_is_said_so_on_a_page(visitor: Visits, path: str) -> None:
    response = visitor("Rea").get(path)
    assert response.status_code == 404
    assert "<h1>Not in the book</h1>" in response.get_data(as_text=True)


def test_a_token_of_a_page_that_is_none_is_refused_on_a_page(visitor: Visits) -> None:
    response = visitor("Rea").get("/journal?after=nonsense")
    assert response.status_code == 422
    assert "<h1>That does not fit</h1>" in response.get_data(as_text=True)


def test_charts_are_served_as_documents_and_as_pictures(visitor: Visits, yard: Yard) -> None:
    rea = visitor("Rea")
    for line in ("left", "right", "side_ratio", "width"):
        address = f"/vehicles/tub-7/history/{line}"
        document = json.loads(rea.text(f"{address}.json?shade=dark&width=400"))
        assert document["width"] == 400
        picture = rea.get(f"{address}.svg?shade=light&width=400")
        assert picture.mimetype == "image/svg+xml"
        assert "script" not in picture.headers["Content-Security-Policy"]
    for part in ("path", "end"):
        assert json.loads(rea.text(f"/runs/{yard.run.run_id}/drawing/{part}.json"))["layer"]
        assert rea.get(f"/runs/{yard.run.run_id}/drawing/{part}.svg").data.startswith(b"<svg")
    assert rea.get(f"/runs/{yard.run.run_id}/drawing/start.json").status_code == 404


def test_a_vehicle_without_a_past_has_no_charts_and_says_so(visitor: Visits) -> None:
    rea = visitor("Rea")
    text = rea.text("/vehicles/tub-8")
    assert "data-chart" not in text
    assert "Nothing has been in force and nothing was evaluated yet." in text
    assert rea.get("/vehicles/tub-8/history/left.json").status_code == 404


def test_without_scripts_charts_are_pictures_and_their_numbers_a_table(visitor: Visits) -> None:
    text = visitor("Rea").text("/vehicles/tub-7")
    inside = re.findall(r"<noscript>(.*?)</noscript>", text, re.S)
    assert [re.search(r'src="([^"?]+)', one).group(1) for one in inside] == [  # type: ignore[union-attr]  # a miss fails
        f"/vehicles/tub-7/history/{line}.svg" for line in ("left", "right", "side_ratio", "width")
    ]
    assert "The same in numbers" in text
    assert text.count('data-label="As of"') == 30


def test_the_drawing_script_is_kept_by_browsers_under_its_own_name(visitor: Visits, stranger: Visitor) -> None:
    address = re.search(r'src="(/drawing/[0-9a-f]+\.js)"', visitor("Rea").text("/vehicles/tub-7"))
    assert address
    response = stranger.client.get(address.group(1), headers={"Accept-Encoding": "gzip"})
    assert response.headers["Content-Encoding"] == "gzip"
    assert "immutable" in response.headers["Cache-Control"]
    assert stranger.client.get(address.group(1)).headers.get("Content-Encoding") is None
    assert stranger.client.get("/drawing/0000.js").status_code == 404


def test_older_runs_are_a_page_further(visitor: Visits, yard: Yard) -> None:
    text = visitor("Rea").text("/vehicles/tub-7")
    assert yard.run.run_key in text
    assert "Earlier runs" not in text
