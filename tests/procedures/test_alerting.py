"""Alerts: one open a cause, moved by evidence in the order of its time, seen by people, closed by evidence."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import pytest

from registry.domain.alert import Alert, AlertContent
from registry.domain.person import Actor
from registry.errors import Conflict, NotAllowed, NotFound
from registry.procedures import alerting
from registry.procedures.registration import put_vehicle
from registry.storage import alerts, journal
from registry.storage.journal import JournalFilter
from tests.procedures.drives_on_record import APPROVER, STATEMENT, TECHNICIAN, VEHICLE, DrivenVehicle

SCALE = AlertContent(
    kind="beyond_tolerance",
    quantity="tick_factor",
    message="Ore tub 9: tick factor is +0.80 % off what it drives on (tolerance 0.5 %)",
    consequence="The vehicle overshoots 80 mm in 10 m.",
    advice="Look at the tracks.",
    priority="medium",
    act_within="this shift",
    size=0.008,
    u=0.0004,
    probability_beyond=0.999,
)
WIDTH = replace(SCALE, quantity="width", size=0.03)
SILENCE = replace(SCALE, kind="no_evidence", quantity=None, size=None, u=None, probability_beyond=None)
UNLOADED = replace(SILENCE, kind="not_loaded")


@dataclass
class Watch:
    """Speaks of one vehicle at a time that is given."""

    driven: DrivenVehicle

    def say(self, content: AlertContent, at: datetime) -> Alert | None:
        with self.driven.services.write() as c:
            return alerting.raise_or_update(c, self.driven.services, VEHICLE, content, at)

    def clear(self, content: AlertContent, at: datetime, note: str = "within again") -> Alert | None:
        with self.driven.services.write() as c:
            return alerting.clear(c, self.driven.services, VEHICLE, content.cause(), at, note)

    def acknowledge(self, alert: Alert, note: str | None = None) -> Alert:
        return alerting.acknowledge(self.driven.services, TECHNICIAN, alert.alert_id, note)

    def open(self) -> list[Alert]:
        with self.driven.services.read() as c:
            return alerts.open_for(c, VEHICLE)

    def all(self) -> list[Alert]:
        with self.driven.services.read() as c:
            return list(alerts.page(c, "all", VEHICLE, 100, None).items)

    def actions(self) -> list[str]:
        with self.driven.services.read() as c:
            entries = journal.page(c, JournalFilter(vehicle_id=VEHICLE), 100, None).items
        return [entry.action for entry in reversed(entries) if entry.action.startswith("alert")]


@pytest.fixture
def watch(driven: DrivenVehicle) -> Watch:
    return Watch(driven)


@pytest.fixture
def day(watch: Watch) -> datetime:
    return watch.driven.clock()


def raised(watch: Watch, at: datetime, content: AlertContent = SCALE) -> Alert:
    alert = watch.say(content, at)
    assert alert is not None
    return alert


def test_a_cause_has_one_open_alert_however_often_it_is_said(watch: Watch, day: datetime) -> None:
    first = raised(watch, day)
    again = raised(watch, day + timedelta(days=1))
    assert again == replace(first, history=())
    assert watch.open() == [replace(first, history=())]
    assert [event.what for event in watch.all()[0].history] == ["raised"]
    assert watch.actions() == ["alert raised"]


def test_other_causes_are_other_alerts(watch: Watch, day: datetime) -> None:
    made = [raised(watch, day, content) for content in (SCALE, WIDTH, SILENCE)]
    assert len({alert.alert_id for alert in made}) == 3
    assert [alert.content.cause() for alert in watch.open()] == [
        "beyond_tolerance:tick_factor",
        "beyond_tolerance:width",
        "no_evidence",
    ]


def test_an_open_alert_says_what_holds_now_and_keeps_what_it_said(watch: Watch, day: datetime) -> None:
    raised(watch, day)
    later = replace(SCALE, size=0.012)
    answered = raised(watch, day + timedelta(days=1), later)
    (alert,) = watch.all()
    assert (alert.content, alert.raised_at, alert.updated_at) == (later, day, day + timedelta(days=1))
    assert (answered.content, answered.updated_at) == (alert.content, alert.updated_at)
    assert [event.content for event in alert.history] == [SCALE, later]


def test_times_of_the_pass_and_of_the_writing_are_kept_apart(watch: Watch, day: datetime) -> None:
    written = watch.driven.clock.move(days=30)
    raised(watch, day)
    (alert,) = watch.all()
    assert (alert.raised_at, alert.recorded_at) == (day, written)
    assert (alert.history[0].at, alert.history[0].recorded_at) == (day, written)


def test_what_nobody_has_seen_returns_and_is_closed_by_being_seen(watch: Watch, day: datetime) -> None:
    alert = raised(watch, day)
    watch.clear(SCALE, day + timedelta(days=1))
    assert [one.standing for one in watch.open()] == ["returned"]
    closed = watch.acknowledge(alert, "seen")
    assert closed.standing == "closed"
    assert watch.open() == []
    assert [event.what for event in closed.history] == ["raised", "no longer holds", "acknowledged"]
    assert watch.actions() == ["alert raised", "alert returned", "alert acknowledged"]


def test_what_was_seen_is_closed_by_evidence(watch: Watch, day: datetime) -> None:
    alert = raised(watch, day)
    assert watch.acknowledge(alert).standing == "acknowledged"
    watch.driven.clock.move(days=1)
    answered = watch.clear(SCALE, watch.driven.clock())
    assert answered is not None
    assert answered.standing == "closed"
    (closed,) = watch.all()
    assert (closed.standing, closed.history[-1].what, closed.history[-1].note) == (
        "closed",
        "closed by evidence",
        "within again",
    )


def test_an_acknowledged_alert_stays_acknowledged_while_it_is_updated(watch: Watch, day: datetime) -> None:
    watch.acknowledge(raised(watch, day))
    watch.driven.clock.move(days=1)
    raised(watch, watch.driven.clock(), replace(SCALE, size=0.011))
    assert [(one.standing, one.content.size) for one in watch.open()] == [("acknowledged", 0.011)]


def test_a_returned_alert_that_holds_again_asks_to_be_seen_again(watch: Watch, day: datetime) -> None:
    first = raised(watch, day)
    watch.clear(SCALE, day + timedelta(days=1))
    again = raised(watch, day + timedelta(days=2), replace(SCALE, size=0.009))
    assert (again.alert_id, again.standing, again.raised_at) == (first.alert_id, "unacknowledged", day)
    (alert,) = watch.all()
    assert (alert.standing, alert.content.size) == ("unacknowledged", 0.009)
    assert [event.what for event in alert.history] == ["raised", "no longer holds", "updated", "raised again"]


def test_a_closed_alert_that_holds_again_is_another_alert(watch: Watch, day: datetime) -> None:
    first = raised(watch, day)
    watch.clear(SCALE, day + timedelta(days=1))
    watch.acknowledge(first)
    second = raised(watch, day + timedelta(days=2))
    assert second.alert_id != first.alert_id
    assert [one.standing for one in watch.all()] == ["unacknowledged", "closed"]


def test_clearing_what_is_not_there_or_has_returned_changes_nothing(watch: Watch, day: datetime) -> None:
    assert watch.clear(SCALE, day) is None
    raised(watch, day)
    watch.clear(SCALE, day + timedelta(days=1))
    watch.clear(SCALE, day + timedelta(days=2))
    assert [event.what for event in watch.all()[0].history] == ["raised", "no longer holds"]


# The order of the evidence, not of the writing


def test_a_look_at_an_earlier_time_changes_nothing(watch: Watch, day: datetime) -> None:
    raised(watch, day)
    before = watch.all()
    raised(watch, day - timedelta(days=1), replace(SCALE, size=0.02))
    watch.clear(SCALE, day - timedelta(hours=1))
    assert watch.all() == before


def test_what_later_evidence_has_closed_is_not_raised_by_an_earlier_look(watch: Watch, day: datetime) -> None:
    watch.acknowledge(raised(watch, day))
    watch.clear(SCALE, day + timedelta(days=5))
    assert watch.say(SCALE, day + timedelta(days=3)) is None
    assert [one.standing for one in watch.all()] == ["closed"]
    assert watch.say(SCALE, day + timedelta(days=6)) is not None


def test_what_people_do_today_does_not_hold_up_the_evidence_of_a_replay(watch: Watch, day: datetime) -> None:
    """A replay raises an alert in the past; a person sees it today; the replay goes on through the past."""
    alert = raised(watch, day)
    watch.driven.clock.move(days=200)
    watch.acknowledge(alert)
    raised(watch, day + timedelta(days=10), replace(SCALE, size=0.013))
    assert [one.content.size for one in watch.open()] == [0.013]
    watch.clear(SCALE, day + timedelta(days=20))
    assert [one.standing for one in watch.all()] == ["closed"]


def test_evidence_on_one_cause_says_nothing_on_another(watch: Watch, day: datetime) -> None:
    raised(watch, day + timedelta(days=9), WIDTH)
    assert raised(watch, day).content == SCALE


def test_evidence_on_one_vehicle_says_nothing_on_another(watch: Watch, day: datetime) -> None:
    services = watch.driven.services
    put_vehicle(services, APPROVER, "tub-10", STATEMENT)
    raised(watch, day + timedelta(days=9))
    with services.write() as c:
        other = alerting.raise_or_update(c, services, "tub-10", SCALE, day)
        assert alerting.clear(c, services, "tub-10", WIDTH.cause(), day, "never was") is None
    assert other is not None
    assert (other.vehicle_id, other.raised_at) == ("tub-10", day)


def test_another_calibration_ends_deviations_and_loading_and_nothing_else(watch: Watch, day: datetime) -> None:
    for content in (SCALE, WIDTH, SILENCE, UNLOADED, replace(SILENCE, kind="boot_mismatch")):
        raised(watch, day, content)
    services = watch.driven.services
    with services.write() as c:
        alerting.clear_for_another(c, services, VEHICLE, day + timedelta(hours=1), "another is in force")
    assert {one.content.cause(): one.standing for one in watch.open()} == {
        "beyond_tolerance:tick_factor": "returned",
        "beyond_tolerance:width": "returned",
        "not_loaded": "returned",
        "no_evidence": "unacknowledged",
        "boot_mismatch": "unacknowledged",
    }


# People


def test_an_alert_is_acknowledged_once_with_a_note(watch: Watch, day: datetime) -> None:
    alert = raised(watch, day)
    watch.driven.clock.move(minutes=20)
    seen = watch.acknowledge(alert, "will look at the left track")
    event = seen.history[-1]
    assert (event.by, event.what, event.note, event.at) == (
        "Tove",
        "acknowledged",
        "will look at the left track",
        watch.driven.clock(),
    )
    with pytest.raises(Conflict, match="already acknowledged"):
        watch.acknowledge(alert)
    watch.clear(SCALE, watch.driven.clock())
    with pytest.raises(Conflict, match="already closed"):
        watch.acknowledge(alert)


@pytest.mark.parametrize("actor", [Actor("person", "Rea", "reader"), Actor("vehicle", VEHICLE)], ids=str)
def test_readers_and_vehicles_do_not_acknowledge(watch: Watch, day: datetime, actor: Actor) -> None:
    alert = raised(watch, day)
    with pytest.raises(NotAllowed):
        alerting.acknowledge(watch.driven.services, actor, alert.alert_id, None)
    assert [one.standing for one in watch.open()] == ["unacknowledged"]


def test_an_unknown_alert_is_not_found(watch: Watch) -> None:
    with pytest.raises(NotFound):
        alerting.acknowledge(watch.driven.services, TECHNICIAN, "nowhere", None)
