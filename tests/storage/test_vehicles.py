from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import pytest

from registry.errors import Invalid, NotFound
from registry.storage import vehicles


def test_the_first_version_holds_for_all_time_before_it_and_a_later_one_from_its_recording(services, clock, statement):
    wider = replace(statement, counter_bits=16)
    with services.write() as c:
        first = vehicles.add_version(c, "tub-7", statement, clock(), "Abel")
        second = vehicles.add_version(c, "tub-7", wider, clock.move(days=2), "Kim")
    with services.read() as c:
        assert vehicles.at(c, "tub-7", clock() - timedelta(days=4000)) == first
        assert vehicles.at(c, "tub-7", clock() - timedelta(seconds=1)) == first
        assert vehicles.at(c, "tub-7", clock()) == second
        assert vehicles.current(c, "tub-7") == second
        assert vehicles.versions(c, "tub-7") == [first, second]
        assert vehicles.by_version(c, "tub-7", 1) == first
    assert first.valid_from is None
    assert second.statement == wider


def test_an_unknown_vehicle_or_version_is_named(services, vehicle):
    with services.read() as c:
        assert vehicles.find_current(c, "tub-8") is None
        with pytest.raises(NotFound, match="tub-8"):
            vehicles.current(c, "tub-8")
        with pytest.raises(NotFound, match="tub-8"):
            vehicles.at(c, "tub-8", vehicle.recorded_at)
        with pytest.raises(NotFound, match="no version 4"):
            vehicles.by_version(c, "tub-7", 4)


def test_pages_go_from_the_vehicle_registered_last_to_the_first_without_gap_or_repeat(services, clock, statement):
    names = [f"tub-{i}" for i in (5, 3, 9, 1, 7, 2, 8)]
    with services.write() as c:
        for name in names:
            vehicles.add_version(c, name, statement, clock(), "Abel")
        vehicles.add_version(c, "tub-9", replace(statement, name="Ore tub nine"), clock.move(hours=1), "Abel")
    with services.read() as c:
        seen, after = [], None
        for size in (3, 3, 1):
            page = vehicles.page(c, 3, after)
            assert len(page.items) == size
            seen += [version.vehicle_id for version in page.items]
            after = page.after
        assert after is None
        assert seen == names[::-1]
        assert [version.version for version in vehicles.all_current(c) if version.vehicle_id == "tub-9"] == [2]


@pytest.mark.parametrize(
    "token", ["", "x", "%%%", "WzFd=", "bm8", "W10", "WyJhIl0", "WzEsMl0", "W3RydWVd", "WzFlOTld", "ä"]
)
def test_a_token_of_another_collection_is_refused(services, token):
    with services.read() as c, pytest.raises(Invalid, match="take 'after'") as refused:
        vehicles.page(c, 3, token)
    assert refused.value.errors[0].pointer == "/after"
