from __future__ import annotations

from datetime import timedelta

import pytest

from registry.domain.maintenance import ENDS_WINDOW
from registry.errors import Invalid, NotAllowed, NotFound
from registry.procedures.maintenance import record_maintenance
from registry.storage import journal, maintenance
from registry.storage.journal import JournalFilter


def test_work_is_recorded_with_whether_it_ends_the_window(services, technician, vehicle, clock):
    done_at = clock() - timedelta(hours=2)
    for kind, ends in ENDS_WINDOW.items():
        made = record_maintenance(services, technician, "tub-7", done_at, kind, "left", "by the day shift")
        assert made.ends_window is ends
    with services.read() as c:
        assert len(maintenance.all_for(c, "tub-7")) == len(ENDS_WINDOW)
        entry = journal.page(c, JournalFilter(), 1, None).items[0]
    assert (entry.action, entry.who, entry.vehicle_id) == ("maintenance", "Tove", "tub-7")


def test_work_that_lies_ahead_is_refused_but_a_clock_may_be_a_little_fast(services, technician, vehicle, clock):
    with pytest.raises(Invalid, match="lies ahead") as refused:
        record_maintenance(services, technician, "tub-7", clock() + timedelta(minutes=6), "towed")
    assert refused.value.errors[0].pointer == "/done_at"
    made = record_maintenance(services, technician, "tub-7", clock() + timedelta(minutes=4), "towed")
    assert made.done_at == clock()


def test_an_unknown_kind_vehicle_or_role_is_refused(services, technician, reader, vehicle, clock):
    with pytest.raises(Invalid, match="part_fitted"):
        record_maintenance(services, technician, "tub-7", clock(), "polished")  # type: ignore[arg-type]  # the point
    with pytest.raises(NotFound):
        record_maintenance(services, technician, "tub-9", clock(), "towed")
    with pytest.raises(NotAllowed):
        record_maintenance(services, reader, "tub-7", clock(), "towed")
    with services.read() as c:
        assert maintenance.all_for(c, "tub-7") == []
