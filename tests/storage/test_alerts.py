from __future__ import annotations

from datetime import timedelta

import pytest

from registry.errors import NotFound
from registry.storage import alerts
from registry.storage.engine import DatabaseError

from .samples import content_of


@pytest.fixture
def raised(services, clock, vehicle):
    with services.write() as c:
        return alerts.raise_alert(c, "a1", "tub-7", content_of(), clock() - timedelta(hours=1), clock())


def test_an_alert_begins_unacknowledged_with_its_first_content_in_the_history(raised, clock):
    assert raised.standing == "unacknowledged"
    assert raised.content == content_of()
    assert (raised.raised_at, raised.recorded_at) == (clock() - timedelta(hours=1), clock())
    (event,) = raised.history
    assert (event.what, event.content, event.by) == ("raised", content_of(), "rollbook")


def test_an_alert_follows_the_evidence_and_its_history_keeps_what_it_said_first(services, clock, raised):
    worse = content_of(message="The tick factor is 0.9 % short.", size=-0.009)
    with services.write() as c:
        alerts.update(c, "a1", worse, clock.move(days=1), clock())
        alerts.set_standing(c, "a1", "acknowledged", clock.move(hours=1), clock(), "Tove", "acknowledged", "on it")
        told = alerts.by_id(c, "a1")
    assert told.content == worse
    assert told.standing == "acknowledged"
    assert told.updated_at == clock()
    assert [event.what for event in told.history] == ["raised", "updated", "acknowledged"]
    assert told.history[0].content == content_of()
    assert (told.history[2].by, told.history[2].note, told.history[2].content) == ("Tove", "on it", None)


def test_a_second_open_alert_for_one_cause_is_refused_by_the_database(services, clock, raised):
    with pytest.raises(DatabaseError, match="UNIQUE"), services.write() as c:
        alerts.raise_alert(c, "a2", "tub-7", content_of(), clock(), clock())
    with services.write() as c:
        alerts.raise_alert(c, "a3", "tub-7", content_of(quantity="width"), clock(), clock())
        alerts.set_standing(c, "a1", "closed", clock(), clock(), "rollbook", "closed", None)
        alerts.raise_alert(c, "a4", "tub-7", content_of(), clock(), clock())
        assert [one.alert_id for one in alerts.open_for(c, "tub-7")] == ["a3", "a4"]


def test_open_is_everything_but_closed(services, clock, vehicle):
    standings = ["acknowledged", "returned", "shelved", "closed"]
    quantities = ["tick_factor", "side_ratio", "width", None]
    with services.write() as c:
        for i, (standing, quantity) in enumerate(zip(standings, quantities, strict=True)):
            alerts.raise_alert(c, f"a{i}", "tub-7", content_of(quantity=quantity), clock.move(hours=1), clock())
            alerts.set_standing(c, f"a{i}", standing, clock(), clock(), "Tove", standing, None)
        alerts.raise_alert(c, "fleet", None, content_of(kind="no_evidence"), clock.move(hours=1), clock())
    with services.read() as c:
        assert [one.alert_id for one in alerts.all_open(c)] == ["fleet", "a2", "a1", "a0"]
        page = alerts.page(c, "all", "tub-7", 3, None)
        rest = alerts.page(c, "all", "tub-7", 3, page.after)
        assert [one.alert_id for one in (*page.items, *rest.items)] == ["a3", "a2", "a1", "a0"]
        assert [one.alert_id for one in alerts.page(c, "open", None, 9, None).items] == ["fleet", "a2", "a1", "a0"]
        assert len(page.items[0].history) == 2


def test_how_alerts_stood_at_a_past_time_as_far_as_it_was_known(services, clock, raised):
    raised_at, recorded_at = raised.raised_at, raised.recorded_at
    worse = content_of(message="worse")
    with services.write() as c:
        updated = clock.move(days=1)
        alerts.update(c, "a1", worse, updated, updated)
        closed = clock.move(days=1)
        alerts.set_standing(c, "a1", "closed", closed, closed, "rollbook", "closed by evidence", None)

    def stood(at, known_at=None):
        with services.read() as c:
            return [(one.content.message, one.standing) for one in
                    alerts.standing_at(c, "tub-7", ("beyond_tolerance",), at, known_at)]  # fmt: skip

    first = (content_of().message, "unacknowledged")
    assert stood(raised_at - timedelta(seconds=1)) == []
    assert stood(raised_at) == [first]
    assert stood(raised_at, recorded_at - timedelta(seconds=1)) == []
    assert stood(updated) == [("worse", "unacknowledged")]
    assert stood(closed) == []
    assert stood(closed, updated) == [("worse", "unacknowledged")]
    with services.read() as c:
        assert alerts.standing_at(c, "tub-7", ("boot_mismatch",), updated, None) == []


def test_an_unknown_alert_is_named(services, vehicle):
    with services.write() as c:
        with pytest.raises(NotFound, match="none"):
            alerts.by_id(c, "none")
        with pytest.raises(NotFound, match="none"):
            alerts.update(c, "none", content_of(), vehicle.recorded_at, vehicle.recorded_at)
