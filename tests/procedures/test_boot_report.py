from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import pytest

from registry.domain.boot import BootStatement
from registry.domain.person import Actor
from registry.errors import Invalid, NotAllowed, NotFound
from registry.procedures import alerting, boot
from registry.procedures.adoption import adopt, withdraw
from registry.procedures.registration import put_vehicle
from registry.storage import alerts, boots

TUB = Actor("vehicle", "tub-7")


def report(services, number=None, digest=None, source="fetched", booted_at=None):
    return boot.report_boot(services, TUB, "tub-7", BootStatement(number, digest, source, booted_at, None, "drive 2.1"))


def mismatch(services):
    with services.read() as c:
        stood = [one for one in alerts.open_for(c, "tub-7") if one.content.kind == "boot_mismatch"]
    return stood[0] if stood else None


def digest_of(services, reader):
    return boot.parameters(services, reader, "tub-7").digest


def test_a_boot_on_what_is_in_force_matches_by_number_by_digest_and_by_both(services, proposer, reader):
    adopted = proposer.adopt()
    digest = digest_of(services, reader)
    for number, stated in ((1, None), (None, digest), (1, digest)):
        made = report(services, number, stated)
        assert made.matched
        assert made.calibration_id == adopted.calibration_id
    assert mismatch(services) is None


def test_a_digest_handed_out_before_a_change_of_counting_still_names_its_calibration(
    services, proposer, approver, reader, statement
):
    proposer.adopt()
    digest = digest_of(services, reader)
    put_vehicle(services, approver, "tub-7", replace(statement, counter_bits=16), statement.etag())
    assert report(services, None, digest).matched


@pytest.mark.parametrize(
    ("number", "digest", "source", "words"),
    [
        (7, None, "fetched", "number 7 that it never had"),
        (None, "0" * 64, "kept", "digest that was never handed out"),
        (1, "0" * 64, "kept", "digest that was never handed out"),
        (None, None, "built_in", "built into it"),
        (7, None, "built_in", "number 7 that it never had"),
    ],
)
def test_what_is_not_known_here_or_built_in_raises_at_once(services, proposer, number, digest, source, words):
    proposer.adopt()
    made = report(services, number, digest, source)
    assert not made.matched
    alert = mismatch(services)
    assert alert is not None
    assert words in alert.content.message
    assert (alert.content.priority, alert.content.act_within) == ("high", "before it drives")
    assert "calibration 1" in alert.content.advice


def test_number_or_digest_say_what_was_loaded_whatever_the_source(services, proposer, reader):
    proposer.adopt()
    for source in ("fetched", "kept", "carried", "built_in", None):
        assert report(services, 1, None, source).matched
        assert report(services, None, digest_of(services, reader), source).matched
    assert mismatch(services) is None


def test_number_and_digest_that_contradict_each_other_say_so(services, proposer, reader, clock):
    proposer.adopt()
    digest = digest_of(services, reader)
    clock.move(days=3)
    proposer.adopt()
    made = report(services, 2, digest)
    assert not made.matched
    alert = mismatch(services)
    assert alert is not None
    assert "number 2 but the digest of number 1" in alert.content.message


def test_the_set_before_is_matched_for_a_day_after_the_new_one_came_into_force(services, proposer, clock):
    proposer.adopt()
    clock.move(days=10)
    second = proposer.adopt()
    since = second.in_force_from
    clock.move(days=2)
    assert report(services, 1, booted_at=since + timedelta(hours=24)).matched
    assert not report(services, 1, booted_at=since + timedelta(hours=24, seconds=1)).matched
    assert report(services, 2).matched


def test_the_grace_counts_from_when_it_came_into_force_not_from_when_that_was_recorded(
    services, proposer, approver, clock
):
    proposer.adopt()
    clock.move(days=10)
    late = proposer.propose()
    adopt(services, approver, late.calibration_id, "entered late", clock() - timedelta(days=3))
    assert not report(services, 1).matched
    assert report(services, 1, booted_at=clock() - timedelta(days=2, hours=1)).matched


def test_a_set_that_was_superseded_twice_has_no_grace_left(services, proposer, clock):
    proposer.adopt()
    clock.move(days=5)
    proposer.adopt()
    clock.move(days=5)
    proposer.adopt()
    assert not report(services, 1).matched
    alert = mismatch(services)
    assert alert is not None
    assert "superseded more than a day before" in alert.content.message


def test_a_proposal_is_no_set_to_drive_on(services, proposer):
    proposer.adopt()
    proposer.propose()
    assert not report(services, 2).matched
    alert = mismatch(services)
    assert alert is not None
    assert "never put into force" in alert.content.message


def test_a_boot_on_a_set_before_it_came_into_force_is_a_mismatch_but_a_clock_may_be_a_little_slow(
    services, proposer, clock
):
    adopted = proposer.adopt()
    assert report(services, 1, booted_at=adopted.in_force_from - timedelta(minutes=4)).matched
    assert not report(services, 1, booted_at=adopted.in_force_from - timedelta(minutes=6)).matched


def test_a_withdrawn_set_is_a_mismatch_even_within_the_grace(services, proposer, approver, clock):
    first = proposer.adopt()
    clock.move(days=3)
    second = proposer.adopt()
    withdraw(services, approver, second.calibration_id, "misread", "reinstate", first.number)
    clock.move(hours=1)
    assert not report(services, 2).matched
    alert = mismatch(services)
    assert alert is not None
    assert "which is withdrawn" in alert.content.message
    assert report(services, 1).matched


def test_with_nothing_in_force_the_advice_is_to_put_something_into_force(services, proposer, approver, clock):
    adopted = proposer.adopt()
    withdraw(services, approver, adopted.calibration_id, "misread", "nothing")
    report(services, 1)
    alert = mismatch(services)
    assert alert is not None
    assert "Nothing is in force" in alert.content.advice


def test_the_consequence_is_said_in_words_of_the_floor(services, proposer, clock):
    proposer.adopt()
    clock.move(days=3)
    proposer.adopt(result=proposer.result(left_mm=0.3512, right_mm=0.3514))
    clock.move(days=3)
    report(services, 1)
    alert = mismatch(services)
    assert alert is not None
    assert "overshoots 101 mm in 10 m" in alert.content.consequence


def test_a_matching_boot_clears_the_alert_and_a_second_mismatch_updates_it(services, proposer, clock, technician):
    proposer.adopt()
    report(services, 7)
    first = mismatch(services)
    assert first is not None
    clock.move(minutes=5)
    report(services, 8)
    again = mismatch(services)
    assert again is not None
    assert again.alert_id == first.alert_id
    assert "number 8" in again.content.message
    alerting.acknowledge(services, technician, first.alert_id, "seen")
    clock.move(minutes=5)
    report(services, 1)
    assert mismatch(services) is None
    with services.read() as c:
        assert alerts.by_id(c, first.alert_id).standing == "closed"


def test_a_late_report_of_a_mismatch_before_a_right_boot_is_raised_and_stands_as_returned_until_seen(
    services, proposer, clock, technician
):
    proposer.adopt()
    clock.move(days=3)
    assert report(services, 1).matched
    wrong_at = clock() - timedelta(days=1)
    assert not report(services, 7, booted_at=wrong_at).matched
    alert = mismatch(services)
    assert alert is not None
    assert alert.standing == "returned"
    assert alert.content.onset_at == wrong_at
    assert "number 7 that it never had" in alert.content.message
    assert "It has loaded what is in force since" in alert.content.advice
    with services.read() as c:
        told = [(event.what, event.note) for event in alerts.by_id(c, alert.alert_id).history]
    assert [what for what, _ in told] == ["raised", "no longer holds"]
    assert told[-1][1] == f"a later boot, {clock():%Y-%m-%d %H:%M} UTC, loaded what is in force"
    assert alerting.acknowledge(services, technician, alert.alert_id, "seen").standing == "closed"


def test_a_late_report_of_a_right_boot_clears_nothing(services, proposer, clock):
    proposer.adopt()
    clock.move(days=3)
    report(services, 7)
    assert report(services, 1, booted_at=clock() - timedelta(hours=1)).matched
    alert = mismatch(services)
    assert alert is not None
    assert alert.standing == "unacknowledged"
    assert alert.content.onset_at == clock()
    with services.read() as c:
        assert len(boots.all_for(c, "tub-7")) == 2


def test_the_onset_is_the_first_of_the_wrong_boots_in_whatever_order_they_are_reported(services, proposer, clock):
    proposer.adopt()
    clock.move(days=3)
    first_at = clock()
    report(services, 7)
    clock.move(hours=4)
    report(services, 8)
    alert = mismatch(services)
    assert alert is not None
    assert "number 8" in alert.content.message
    assert alert.content.onset_at == first_at
    report(services, 9, booted_at=first_at - timedelta(hours=2))
    alert = mismatch(services)
    assert alert is not None
    assert "number 8" in alert.content.message, "the alert tells of the last boot"
    assert alert.content.onset_at == first_at - timedelta(hours=2)
    report(services, 1, booted_at=first_at + timedelta(hours=1))
    alert = mismatch(services)
    assert alert is not None
    assert (alert.standing, alert.content.onset_at) == ("unacknowledged", clock())


def test_the_onset_begins_anew_with_the_first_wrong_boot_after_a_right_one(services, proposer, clock):
    proposer.adopt()
    report(services, 7)
    clock.move(hours=1)
    report(services, 1)
    clock.move(hours=1)
    report(services, 7)
    alert = mismatch(services)
    assert alert is not None
    assert (alert.standing, alert.content.onset_at) == ("unacknowledged", clock())


def test_a_set_that_was_in_force_at_the_boot_matches_even_when_it_was_withdrawn_since(
    services, proposer, approver, clock
):
    first = proposer.adopt()
    clock.move(days=3)
    second = proposer.adopt()
    clock.move(days=3)
    withdrawn_at = clock()
    withdraw(services, approver, second.calibration_id, "misread", "reinstate", first.number)
    clock.move(hours=1)
    assert report(services, 2, booted_at=withdrawn_at - timedelta(hours=1)).matched
    assert report(services, 2, booted_at=withdrawn_at - timedelta(seconds=1)).matched
    assert mismatch(services) is None
    assert not report(services, 2, booted_at=withdrawn_at).matched
    assert not report(services, 2).matched
    assert "which is withdrawn" in mismatch(services).content.message


def test_a_superseded_set_that_is_withdrawn_loses_its_grace_from_then_on(services, proposer, approver, clock):
    first = proposer.adopt()
    clock.move(days=3)
    proposer.adopt()
    clock.move(hours=2)
    withdrawn_at = clock()
    withdraw(services, approver, first.calibration_id, "misread", "nothing", None)
    clock.move(hours=2)
    assert report(services, 1, booted_at=withdrawn_at - timedelta(hours=1)).matched
    assert not report(services, 1).matched


def test_a_boot_ahead_of_the_clock_or_without_any_name_is_refused_and_nothing_is_stored(services, proposer, clock):
    proposer.adopt()
    with pytest.raises(Invalid, match="lies ahead") as refused:
        report(services, 1, booted_at=clock() + timedelta(minutes=6))
    assert refused.value.errors[0].pointer == "/booted_at"
    with pytest.raises(Invalid, match="which parameters") as refused:
        report(services, None, None, "kept")
    assert refused.value.errors[0].pointer == "/calibration_number"
    with services.read() as c:
        assert boots.all_for(c, "tub-7") == []
    assert report(services, 1, booted_at=clock() + timedelta(minutes=4)).booted_at == clock()


def test_a_vehicle_reports_for_itself_only_and_a_person_must_be_a_technician(services, proposer, reader, technician):
    proposer.adopt()
    statement = BootStatement(1, None, "carried", None, 3600.0, None)
    with pytest.raises(NotAllowed):
        boot.report_boot(services, Actor("vehicle", "tub-8"), "tub-7", statement)
    with pytest.raises(NotAllowed):
        boot.report_boot(services, reader, "tub-7", statement)
    assert boot.report_boot(services, technician, "tub-7", statement).statement.age_s == 3600.0
    with pytest.raises(NotFound, match="tub-9"):
        boot.report_boot(services, technician, "tub-9", statement)
