"""What a vehicle is to load, byte for byte, and how far it may be trusted, now and at any past time."""

from __future__ import annotations

import hashlib
import hmac
import json
from dataclasses import replace
from datetime import timedelta

import pytest

from registry.domain.person import Actor
from registry.errors import Conflict, NotAllowed, NotFound, NothingInForce, NotSignedIn
from registry.procedures import alerting, boot
from registry.procedures.adoption import adopt, withdraw
from registry.procedures.boot_text import sheet_of
from registry.procedures.maintenance import record_maintenance
from registry.procedures.people import add_person, issue_key
from registry.procedures.registration import put_vehicle
from registry.storage import alerts, boots, calibrations, vehicles
from tests.storage.samples import add_runs, content_of, result_of, run_of

KEY = "a key of nobody"
KEY32 = hashlib.sha256(KEY.encode()).digest()

LINES = b"""VEHICLE_ID=tub-7
CALIBRATION_NUMBER=1
IN_FORCE_FROM=2026-03-02T08:30:15Z
LEFT_MM_PER_TICK=0.3477
RIGHT_MM_PER_TICK=0.347912345679
WIDTH_MM=640
U_LEFT_MM_PER_TICK=6.954e-05
U_RIGHT_MM_PER_TICK=6.95824691358e-05
U_WIDTH_MM=0.32
COUNTING_BITS=32
"""


def sheet(services, at=None, known_at=None):
    return boot.parameters(services, Actor("person", "Rea", "reader"), "tub-7", at, known_at)


def questioned(services, at=None, known_at=None):
    found = sheet(services, at, known_at)
    return found.condition == "questioned", found.reasons


def test_the_lines_are_exactly_as_written_down(services, proposer):
    proposer.adopt(result=proposer.result(right_mm=0.34791234567891234, width_mm=640.0))
    found = sheet(services)
    digest = hashlib.sha256(LINES).hexdigest()
    tag = hmac.new(KEY32, (digest + "tub-7").encode(), hashlib.sha256).hexdigest()
    tail = f"CONDITION=good\nREASONS=\nDIGEST={digest}\nTAG={tag}\n".encode()
    assert boot.render_lines(found, KEY32) == LINES + tail


def test_the_json_carries_the_same_rounded_numbers_digest_and_tag(services, proposer):
    proposer.adopt(result=proposer.result(right_mm=0.34791234567891234, width_mm=640.0))
    body, etag = boot.render(sheet(services), KEY32)
    answer = json.loads(body)
    lines = dict(line.split("=", 1) for line in boot.render_lines(sheet(services), KEY32).decode().splitlines())
    assert list(answer) == [
        "vehicle_id", "calibration_number", "in_force_from", "left_mm_per_tick", "right_mm_per_tick", "width_mm", "u",
        "counting", "condition", "reasons", "digest", "tag",
    ]  # fmt: skip
    for name in ("left_mm_per_tick", "right_mm_per_tick", "width_mm"):
        assert f"{answer[name]:.12g}" == lines[name.upper()]
        assert answer[name] == float(lines[name.upper()])
        assert answer["u"][name] == float(lines[f"U_{name.upper()}"])
    assert answer["right_mm_per_tick"] == 0.347912345679
    assert answer["counting"] == {"bits": 32}
    assert (answer["digest"], answer["tag"]) == (lines["DIGEST"], lines["TAG"])
    assert etag == hashlib.sha256(body).hexdigest()[:32]


def test_the_tag_binds_the_key_and_the_vehicle(services, proposer):
    proposer.adopt()
    found = sheet(services)
    body, etag = boot.render(found, KEY32)
    other_key, other_etag = boot.render(found, hashlib.sha256(b"another key").digest())
    assert json.loads(other_key)["tag"] != json.loads(body)["tag"]
    assert other_etag != etag
    elsewhere = replace(found, vehicle_id="tub-8")
    assert json.loads(boot.render(elsewhere, KEY32)[0])["tag"] != json.loads(body)["tag"]


def test_control_characters_become_blanks_and_flat_values_have_their_forms(services, proposer, vehicle):
    class Odd(type(vehicle)):  # type: ignore[misc]  # a counting set-up of a later version, with all kinds of values
        def counting(self):
            more = {"turn_counts": 2048.5, "swapped": False}
            return {"sense": "left\n forward", "exchanged": True, "since": None, "bits": 16, **more}

    adopted = proposer.adopt()
    with services.read() as c:
        entry = calibrations.in_force(c, "tub-7")
    odd = Odd(**{name: getattr(vehicle, name) for name in vehicle.__dataclass_fields__})
    made = sheet_of(odd, entry, adopted, "questioned", ("worn\tband", "second"))
    counting = [line for line in made.head.splitlines() if line.startswith("COUNTING_")]
    assert counting == [
        "COUNTING_BITS=16", "COUNTING_EXCHANGED=1", "COUNTING_SENSE=left  forward", "COUNTING_SINCE=",
        "COUNTING_SWAPPED=0", "COUNTING_TURN_COUNTS=2048.5",
    ]  # fmt: skip
    assert b"\nREASONS=worn band; second\n" in boot.render_lines(made, KEY32)
    assert json.loads(made.answer + "}")["reasons"] == ["worn\tband", "second"]


def test_the_kept_sheet_is_always_what_the_record_says(services, proposer, approver, technician, clock):
    def kept_is_built():
        with services.read() as c:
            try:
                return boots.sheet(c, "tub-7") == boot.build_sheet(c, "tub-7")
            except NothingInForce:
                return boots.sheet(c, "tub-7") is None

    assert kept_is_built()
    first = proposer.adopt()
    assert kept_is_built()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "part_fitted", "left")
    assert kept_is_built()
    clock.move(days=1)
    second = proposer.adopt()
    assert kept_is_built()
    withdraw(services, approver, second.calibration_id, "bad", "reinstate", first.number)
    assert kept_is_built()
    with services.read() as c:
        last = calibrations.in_force(c, "tub-7")
    withdraw(services, approver, last.calibration_id, "bad too", "nothing")
    assert kept_is_built()


def test_good_stays_good_under_alerts_that_do_not_question_the_parameters(services, proposer, clock):
    proposer.adopt()
    with services.write() as c:
        alerts.raise_alert(c, "a1", "tub-7", content_of(kind="no_evidence", quantity=None), clock(), clock())
        boot.refresh_sheet(c, "tub-7", clock())
    assert sheet(services).condition == "good"


@pytest.mark.parametrize(
    ("standing", "expected"),
    [("unacknowledged", True), ("acknowledged", True), ("shelved", True), ("returned", False), ("closed", False)],
)
def test_an_alert_beyond_tolerance_questions_the_parameters_while_it_stands(
    services, proposer, clock, standing, expected
):
    proposer.adopt()
    with services.write() as c:
        alerts.raise_alert(c, "a1", "tub-7", content_of(), clock(), clock())
        alerts.set_standing(c, "a1", standing, clock(), clock(), "Tove", standing, None)
        boot.refresh_sheet(c, "tub-7", clock())
    reasons = (content_of().message,) if expected else ()
    assert questioned(services) == (expected, reasons)
    assert questioned(services, clock(), clock()) == (expected, reasons)


def test_work_that_ends_the_window_questions_until_a_new_calibration(services, proposer, technician, clock):
    proposer.adopt()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "controller_exchanged")
    assert questioned(services) == (False, ())
    record_maintenance(services, technician, "tub-7", clock(), "part_fitted", "left")
    asked, reasons = questioned(services)
    assert asked
    assert reasons == ("new track, tyre or wheel fitted (left) on 2026-03-03: awaits a new calibration",)
    clock.move(hours=3)
    proposer.adopt()
    assert questioned(services) == (False, ())


def test_a_proposal_from_before_the_work_does_not_answer_it(services, proposer, technician, approver, clock):
    proposer.adopt()
    old = proposer.propose()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "track_tensioned", "both")
    clock.move(hours=1)
    adopt(services, approver, old.calibration_id, "was waiting")
    assert questioned(services)[0]


def test_within_one_second_the_order_of_recording_decides(services, proposer, technician, clock):
    proposer.adopt()
    clock.move(seconds=0.1)
    record_maintenance(services, technician, "tub-7", clock().replace(microsecond=0), "part_fitted", "left")
    assert questioned(services)[0]
    clock.move(seconds=0.1)
    proposer.adopt()
    assert not questioned(services)[0]


def test_a_calibration_made_from_runs_answers_the_work_done_before_the_first_of_them(
    services, proposer, technician, clock
):
    """Whenever it came into force: a baseline of old runs, adopted today, knows nothing of yesterday's new tracks."""
    driven = clock()
    with services.write() as c:
        add_runs(c, run_of("before", driven), run_of("after", driven + timedelta(days=4)))
    clock.move(days=5)
    record_maintenance(services, technician, "tub-7", driven + timedelta(days=2), "part_fitted", "both")
    clock.move(days=1)
    proposer.adopt(result=result_of("before", "after"))
    assert questioned(services)[0]
    proposer.adopt(result=result_of("after"))
    assert not questioned(services)[0]


def test_work_recorded_late_but_done_before_the_calibration_needs_no_new_one(services, proposer, technician, clock):
    proposer.adopt()
    clock.move(days=3)
    record_maintenance(services, technician, "tub-7", clock() - timedelta(days=10), "part_fitted", "left")
    assert questioned(services) == (False, ())


def test_a_reinstated_calibration_is_as_old_as_the_one_whose_values_it_carries(
    services, proposer, technician, approver, clock
):
    before = clock()
    record_maintenance(services, technician, "tub-7", before, "part_fitted", "left")
    clock.move(days=1)
    first = proposer.adopt()
    clock.move(days=1)
    second = proposer.adopt()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "pressure_set", "both")
    clock.move(days=1)
    withdraw(services, approver, second.calibration_id, "misread", "reinstate", first.number)
    asked, reasons = questioned(services)
    assert asked
    assert len(reasons) == 1
    assert reasons[0].startswith("tyre pressure set")
    with services.read() as c:
        awaited = boot.awaiting(c, "tub-7")
    assert awaited is not None
    assert awaited.kind == "pressure_set"


def test_a_provisional_one_never_reads_good_and_a_question_goes_first(services, proposer, technician, approver, clock):
    provisional = replace(proposer.result(), kind="provisional")
    first = proposer.adopt(result=provisional)
    assert sheet(services).condition == "provisional"
    assert "provisional" in sheet(services).reasons[0]
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "collided")
    assert sheet(services).condition == "questioned"
    assert len(sheet(services).reasons) == 2
    clock.move(days=1)
    better = proposer.adopt()
    assert sheet(services).condition == "good"
    withdraw(services, approver, better.calibration_id, "misread", "reinstate", first.number)
    assert sheet(services).condition == "questioned"


def test_a_reinstated_provisional_one_stays_provisional(services, proposer, approver, clock):
    first = proposer.adopt(result=replace(proposer.result(), kind="provisional"))
    clock.move(days=1)
    better = proposer.adopt()
    withdraw(services, approver, better.calibration_id, "misread", "reinstate", first.number)
    assert sheet(services).condition == "provisional"


def test_the_past_is_answered_as_it_held_and_as_it_was_known(services, proposer, technician, approver, clock):
    begun = clock()
    proposer.adopt()
    clock.move(days=10)
    work_at = clock()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", work_at, "part_fitted", "right")
    recorded = clock()
    clock.move(days=5)
    late = proposer.propose()
    adopt(services, approver, late.calibration_id, "entered after the fact", clock() - timedelta(days=2))
    entered = clock()

    assert sheet(services).calibration_number == 2
    assert sheet(services).condition == "good"
    assert sheet(services, work_at - timedelta(hours=1)).condition == "good"
    assert sheet(services, work_at).condition == "questioned"
    assert sheet(services, work_at, recorded - timedelta(hours=1)).condition == "good"
    assert sheet(services, entered - timedelta(days=1)).calibration_number == 2
    assert sheet(services, entered - timedelta(days=1), entered - timedelta(hours=1)).calibration_number == 1
    with pytest.raises(NothingInForce):
        sheet(services, begun - timedelta(seconds=1))


def test_the_counting_set_up_of_the_past_is_the_one_that_held_then(services, proposer, approver, statement, clock):
    proposer.adopt()
    then = clock()
    clock.move(days=3)
    put_vehicle(services, approver, "tub-7", replace(statement, counter_bits=24), statement.etag())
    assert "COUNTING_BITS=24" in sheet(services).head
    assert "COUNTING_BITS=32" in sheet(services, then).head
    assert "COUNTING_BITS=32" in sheet(services, clock(), then).head


def test_what_was_withdrawn_by_then_is_told_when_nothing_was_in_force(services, proposer, approver, clock):
    adopted = proposer.adopt()
    clock.move(days=1)
    withdraw(services, approver, adopted.calibration_id, "bad", "nothing")
    gone = clock()
    clock.move(days=1)
    for numbers, times in (((1,), (None, None)), ((1,), (gone, None))):
        with pytest.raises(NothingInForce) as refused:
            sheet(services, *times)
        assert refused.value.withdrawn_numbers == numbers
    assert sheet(services, gone - timedelta(hours=1)).calibration_number == 1


def test_an_alert_raised_and_cleared_by_evidence_questions_the_time_between(services, proposer, clock):
    proposer.adopt()
    raised = clock.move(days=1)
    with services.write() as c:
        alerting.raise_or_update(c, services, "tub-7", content_of(), raised)
    cleared = clock.move(days=1)
    with services.write() as c:
        alerting.clear(c, services, "tub-7", content_of().cause(), cleared, "within tolerance again")
    assert [questioned(services, at)[0] for at in (raised - timedelta(hours=1), raised, cleared)] == [
        False,
        True,
        False,
    ]


def test_the_boot_path_checks_the_key_and_answers_the_kept_sheet(services, proposer, keeper, approver, statement):
    adopted = proposer.adopt()
    put_vehicle(services, approver, "tub-8", statement)
    key = issue_key(services, keeper, vehicle_id="tub-7")
    other = issue_key(services, keeper, vehicle_id="tub-8")
    found, key32 = boot.fetch(services, key, "tub-7")
    assert found == sheet(services)
    assert found.calibration_id == adopted.calibration_id
    assert key32 == hashlib.sha256(key.encode()).digest()
    with pytest.raises(NotSignedIn):
        boot.fetch(services, key + "x", "tub-7")
    with pytest.raises(NotAllowed):
        boot.fetch(services, other, "tub-7")
    with pytest.raises(NothingInForce):
        boot.fetch(services, other, "tub-8")
    with pytest.raises(NotAllowed):
        boot.fetch(services, key, "tub-9")


def test_a_persons_key_reads_any_vehicle_and_an_unknown_one_is_named(services, proposer, keeper):
    proposer.adopt()
    add_person(services, keeper, "Rea", "reader", "oak-bridge-9")
    key = issue_key(services, keeper, person="Rea")
    assert boot.fetch(services, key, "tub-7")[0].calibration_number == 1
    with pytest.raises(NotFound, match="tub-9"):
        boot.fetch(services, key, "tub-9")


def test_a_file_to_carry_is_tagged_under_the_newest_key_of_the_vehicle(services, proposer, keeper, reader):
    proposer.adopt()
    with pytest.raises(Conflict, match="issue one"):
        boot.parameters_file(services, reader, "tub-7")
    issue_key(services, keeper, vehicle_id="tub-7")
    newest = issue_key(services, keeper, vehicle_id="tub-7")
    found = sheet(services)
    assert boot.parameters_file(services, reader, "tub-7") == boot.render_lines(
        found, hashlib.sha256(newest.encode()).digest()
    )


def test_vehicles_at_a_time_know_their_versions(services, vehicle, clock):
    with services.read() as c:
        assert vehicles.at(c, "tub-7", clock() - timedelta(days=1)) == vehicle
        with pytest.raises(NotFound, match="tub-9"):
            boot.build_sheet(c, "tub-9", clock(), clock())
