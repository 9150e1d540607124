from __future__ import annotations

import json
from dataclasses import replace
from datetime import timedelta

import pytest

from registry.domain.boot import BootStatement
from registry.domain.person import Actor, Person
from registry.errors import Conflict, Invalid, NotAllowed, NotFound, NothingInForce
from registry.procedures import boot
from registry.procedures.adoption import adopt, withdraw
from registry.storage import alerts, calibrations, journal, people
from registry.storage.journal import JournalFilter
from tests.storage.samples import content_of


def standings(services):
    with services.read() as c:
        return [one.standing for one in calibrations.all_for(c, "tub-7")]


def last_entry(services):
    with services.read() as c:
        entry = journal.page(c, JournalFilter(), 1, None).items[0]
    return entry.action, entry.who, json.loads(entry.what)


def test_adopting_puts_into_force_from_the_whole_second_before_now(services, proposer, clock, approver):
    adopted = proposer.adopt()
    assert adopted.standing == "in force"
    assert adopted.in_force_from == clock().replace(microsecond=0)
    assert adopted.in_force_to is None
    action, who, what = last_entry(services)
    assert (action, who) == ("adopted", "Abel")
    assert what["number"] == 1
    assert what["reason"] == "runs of the week agree"
    assert what["entered_late"] is False


def test_the_one_before_is_superseded_and_ends_when_the_new_one_begins(services, proposer, clock):
    first = proposer.adopt()
    clock.move(days=7)
    second = proposer.adopt()
    with services.read() as c:
        before = calibrations.by_id(c, first.calibration_id)
    assert before.standing == "superseded"
    assert before.in_force_to == second.in_force_from == clock().replace(microsecond=0)


def test_other_open_proposals_stay_proposed_but_rest_on_what_no_longer_holds(services, proposer, approver, clock):
    left_over = proposer.propose()
    proposer.adopt()
    assert standings(services) == ["proposed", "in force"]
    with pytest.raises(Conflict, match="calibration 2 is in force now"):
        adopt(services, approver, left_over.calibration_id, "too late")
    assert standings(services) == ["proposed", "in force"]


def test_an_earlier_time_is_taken_and_marked_as_entered_late(services, proposer, approver, clock):
    proposed = proposer.propose()
    since = clock() - timedelta(days=3)
    adopted = adopt(services, approver, proposed.calibration_id, "driven since Friday", since)
    assert adopted.in_force_from == since.replace(microsecond=0)
    with services.read() as c:
        entry = calibrations.in_force(c, "tub-7")
    assert entry is not None
    assert entry.entered_late
    assert last_entry(services)[2]["entered_late"] is True


def test_a_time_ahead_or_before_that_of_the_one_in_force_is_refused(services, proposer, approver, clock):
    first = proposer.adopt()
    clock.move(days=2)
    proposed = proposer.propose()
    second = timedelta(seconds=1)
    for wrong, why in ((clock() + second, "ahead"), (first.in_force_from - second, "before")):
        with pytest.raises(Invalid, match=why) as refused:
            adopt(services, approver, proposed.calibration_id, "why not", wrong)
        assert refused.value.errors[0].pointer == "/in_force_from"
    within = adopt(services, approver, proposed.calibration_id, "why not", first.in_force_from)
    assert within.in_force_from == first.in_force_from


def test_only_a_proposal_can_be_adopted(services, proposer, approver, clock):
    first = proposer.adopt()
    with pytest.raises(Conflict, match="is in force already"):
        adopt(services, approver, first.calibration_id, "again")
    clock.move(days=1)
    second = proposer.adopt()
    with pytest.raises(Conflict, match="was superseded"):
        adopt(services, approver, first.calibration_id, "back")
    withdraw(services, approver, second.calibration_id, "mislabelled run", "nothing")
    with pytest.raises(Conflict, match="is withdrawn"):
        adopt(services, approver, second.calibration_id, "after all")


def test_the_number_confirms_which_calibration_is_meant(services, proposer, approver):
    proposed = proposer.propose()
    with pytest.raises(Conflict, match="this is calibration 1"):
        adopt(services, approver, proposed.calibration_id, "checked", number=2)
    assert adopt(services, approver, proposed.calibration_id, "checked", number=1).standing == "in force"


@pytest.mark.parametrize("reason", ["", "  ", "\n"])
def test_a_reason_is_asked_for(services, proposer, approver, reason):
    proposed = proposer.propose()
    with pytest.raises(Invalid, match="reason is needed"):
        adopt(services, approver, proposed.calibration_id, reason)
    with pytest.raises(Invalid, match="reason is needed"):
        withdraw(services, approver, proposed.calibration_id, reason, "nothing")


def test_a_technician_may_propose_but_neither_adopt_nor_withdraw(services, proposer, technician):
    proposed = proposer.propose()
    with pytest.raises(NotAllowed):
        adopt(services, technician, proposed.calibration_id, "looks good")
    with pytest.raises(NotAllowed):
        withdraw(services, technician, proposed.calibration_id, "looks bad", "nothing")
    assert standings(services) == ["proposed"]


def test_the_local_account_adopts_only_while_there_is_no_approver(services, proposer, local, clock):
    first = proposer.propose()
    assert adopt(services, local, first.calibration_id, "set up").standing == "in force"
    second = proposer.propose()
    with services.write() as c:
        people.add(c, Person("Abel", "approver", "hash", clock()))
    with pytest.raises(NotAllowed, match="Abel"):
        adopt(services, local, second.calibration_id, "at the console")


def test_where_two_persons_are_asked_for_the_proposer_may_not_adopt(services, proposer):
    proposed = proposer.propose()
    strict = replace(services, settings=replace(services.settings, two_person=True))
    with pytest.raises(NotAllowed, match="another person"):
        adopt(strict, Actor("person", "Tove", "approver"), proposed.calibration_id, "mine")
    assert adopt(strict, Actor("person", "Abel", "approver"), proposed.calibration_id, "checked").standing == "in force"


def test_an_alert_against_the_calibration_before_does_not_outlive_it(services, proposer, approver, clock, technician):
    proposer.adopt()
    with services.write() as c:
        alerts.raise_alert(c, "a1", "tub-7", content_of(), clock(), clock())
        boot.refresh_sheet(c, "tub-7", clock())
    assert boot.parameters(services, technician, "tub-7").condition == "questioned"
    clock.move(hours=1)
    proposer.adopt()
    assert boot.parameters(services, technician, "tub-7").condition == "good"
    with services.read() as c:
        assert alerts.by_id(c, "a1").standing == "returned"


def test_withdrawing_with_nothing_leaves_the_vehicle_without_parameters(
    services, proposer, approver, clock, technician
):
    adopted = proposer.adopt()
    boot.report_boot(services, technician, "tub-7", BootStatement(1, None, "fetched", None, None, None))
    clock.move(days=1)
    done = withdraw(services, approver, adopted.calibration_id, "tape was misread", "nothing")
    assert done.in_force is None
    assert done.calibration.standing == "withdrawn"
    assert done.loaded_by == ("tub-7",)
    with pytest.raises(NothingInForce) as refused:
        boot.parameters(services, technician, "tub-7")
    assert refused.value.withdrawn_numbers == (1,)
    action, _who, what = last_entry(services)
    assert action == "withdrawn"
    assert what["loaded_by"] == ["tub-7"]


def test_reinstating_makes_a_new_calibration_with_the_old_values_in_force_at_once(services, proposer, approver, clock):
    good = proposer.adopt()
    clock.move(days=1)
    bad = proposer.adopt(result=proposer.result(left_mm=0.3600))
    clock.move(days=1)
    done = withdraw(services, approver, bad.calibration_id, "tape was misread", "reinstate", 1)
    again = done.in_force
    assert again is not None
    assert (again.number, again.result.kind, again.standing) == (3, "reinstated", "in force")
    assert again.result.parameters == good.result.parameters
    assert again.result.covariance_relative == good.result.covariance_relative
    assert again.reinstates == good.calibration_id
    assert standings(services) == ["superseded", "withdrawn", "in force"]


def test_only_what_was_once_in_force_and_is_not_withdrawn_can_be_reinstated(services, proposer, approver, clock):
    first = proposer.adopt()
    clock.move(days=1)
    never = proposer.propose()
    second = proposer.adopt()
    withdraw(services, approver, first.calibration_id, "old mark was moved", "nothing")
    never_held, withdrawn = "never in force", "is withdrawn"
    for number, why in ((never.number, never_held), (9, never_held), (1, withdrawn), (3, withdrawn)):
        with pytest.raises(Conflict, match=why):
            withdraw(services, approver, second.calibration_id, "wrong mark", "reinstate", number)
    with services.read() as c:
        assert calibrations.by_id(c, second.calibration_id).standing == "in force"


def test_reinstated_values_cannot_return_once_their_origin_is_withdrawn(services, proposer, approver, clock):
    origin = proposer.adopt()
    second = proposer.adopt()
    again = withdraw(services, approver, second.calibration_id, "bad", "reinstate", origin.number).in_force
    assert again is not None
    fourth = proposer.adopt()
    withdraw(services, approver, origin.calibration_id, "bad as well", "nothing")
    with pytest.raises(Conflict, match="carries the values of 1"):
        withdraw(services, approver, fourth.calibration_id, "bad", "reinstate", again.number)


def test_reinstating_a_reinstated_one_names_the_first_origin(services, proposer, approver, clock):
    origin = proposer.adopt()
    bad = proposer.adopt()
    again = withdraw(services, approver, bad.calibration_id, "bad", "reinstate", 1).in_force
    worse = proposer.adopt()
    once_more = withdraw(services, approver, worse.calibration_id, "worse", "reinstate", again.number).in_force
    assert once_more is not None
    assert once_more.reinstates == origin.calibration_id


def test_withdrawing_what_is_not_in_force_leaves_what_is(services, proposer, approver, clock, technician):
    first = proposer.adopt()
    clock.move(days=1)
    second = proposer.adopt()
    done = withdraw(services, approver, first.calibration_id, "mark was moved", "nothing")
    assert done.in_force is not None
    assert done.in_force.calibration_id == second.calibration_id
    assert boot.parameters(services, technician, "tub-7").calibration_number == 2
    proposed = proposer.propose()
    with pytest.raises(Conflict, match="not in force"):
        withdraw(services, approver, proposed.calibration_id, "no", "reinstate", 2)
    withdraw(services, approver, proposed.calibration_id, "no", "nothing")
    assert standings(services) == ["withdrawn", "in force", "withdrawn"]


def test_a_calibration_is_withdrawn_once(services, proposer, approver):
    adopted = proposer.adopt()
    withdraw(services, approver, adopted.calibration_id, "bad", "nothing")
    with pytest.raises(Conflict, match="withdrawn already"):
        withdraw(services, approver, adopted.calibration_id, "bad", "nothing")


@pytest.mark.parametrize(
    ("then", "number", "pointer"), [("maybe", None, "/then"), ("reinstate", None, "/number"), ("nothing", 1, "/number")]
)
def test_what_holds_next_must_be_said(services, proposer, approver, then, number, pointer):
    adopted = proposer.adopt()
    with pytest.raises(Invalid) as refused:
        withdraw(services, approver, adopted.calibration_id, "bad", then, number)
    assert refused.value.errors[0].pointer == pointer
    assert standings(services) == ["in force"]


def test_an_adoption_on_the_ground_left_by_a_withdrawal_is_possible(services, proposer, approver, clock):
    withdraw(services, approver, proposer.adopt().calibration_id, "bad", "nothing")
    clock.move(days=1)
    assert proposer.adopt().standing == "in force"


def test_an_unknown_calibration_is_named(services, approver):
    with pytest.raises(NotFound, match="nothing-such"):
        adopt(services, approver, "nothing-such", "why")
