from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import pytest
from sqlalchemy import event

from registry.errors import NotFound
from registry.storage import calibrations, vehicles
from registry.storage.engine import DatabaseError

from .samples import add_runs, result_of, run_of


@pytest.fixture
def with_runs(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("late", clock()), run_of("early", clock() - timedelta(days=3)))
    return services


def add(services, clock, result, calibration_id="cal1", based_on=None, **more):
    with services.write() as c:
        return calibrations.add(c, calibration_id, "tub-7", result, based_on, clock(), "Tove", **more)


def put(services, clock, calibration_id, in_force_from, late=False):
    with services.write() as c:
        return calibrations.put_in_force(c, "tub-7", calibration_id, in_force_from, clock(), "Abel", "why", late)


def test_a_calibration_comes_back_as_it_was_recorded(with_runs, clock):
    made = add(with_runs, clock, result_of("late", "early"))
    assert (made.number, made.standing, made.in_force_from) == (1, "proposed", None)
    with with_runs.read() as c:
        assert calibrations.by_id(c, "cal1") == made
        assert calibrations.parameters_by_id(c, "cal1") == made.result.parameters
        assert calibrations.by_number(c, "tub-7", 1) == made
        assert calibrations.first_run_at(c, "cal1") == clock() - timedelta(days=3)


def test_numbers_count_per_vehicle_from_one(with_runs, clock, statement):
    with with_runs.write() as c:
        vehicles.add_version(c, "tub-8", statement, clock(), "Abel")
        numbers = [
            calibrations.add(c, f"c{i}", name, result_of(), None, clock(), "Tove").number
            for i, name in enumerate(["tub-7", "tub-7", "tub-8", "tub-7"])
        ]
    assert numbers == [1, 2, 1, 3]


def test_standing_is_the_latest_and_open_proposals_can_be_asked_by_kind(with_runs, clock):
    for i, kind in enumerate(["baseline", "evaluation", "entered"]):
        add(with_runs, clock, replace(result_of(), kind=kind), f"c{i}")
    with with_runs.write() as c:
        calibrations.add_standing(c, "c0", "withdrawn", clock(), "Abel", "a run was mislabelled")
        assert [one.calibration_id for one in calibrations.open_proposals(c, "tub-7")] == ["c1", "c2"]
        assert [one.calibration_id for one in calibrations.open_proposals(c, "tub-7", "evaluation")] == ["c1"]
        assert calibrations.withdrawn_numbers(c, "tub-7") == (1,)
        assert calibrations.withdrawn_numbers(c, "tub-7", clock() - timedelta(seconds=1)) == ()


def test_what_was_in_force_and_what_was_known_at_any_time(with_runs, clock):
    begun = clock()
    add(with_runs, clock, result_of(), "c1")
    add(with_runs, clock, result_of(), "c2")
    put(with_runs, clock, "c1", begun)
    recorded = clock.move(days=10)
    put(with_runs, clock, "c2", begun + timedelta(days=4), late=True)
    gone = clock.move(days=10)
    put(with_runs, clock, None, gone)

    def held(at, known_at=None):
        with with_runs.read() as c:
            entry = calibrations.in_force(c, "tub-7", at, known_at)
        return None if entry is None else entry.number

    assert held(begun - timedelta(seconds=1)) is None
    assert held(begun) == 1
    assert held(begun + timedelta(days=4)) == 2
    assert held(begun + timedelta(days=4), recorded - timedelta(seconds=1)) == 1
    assert held(gone) is None
    assert held(gone, gone - timedelta(seconds=1)) == 2
    assert held(None) is None
    assert held(None, recorded) == 2
    with with_runs.read() as c:
        assert [entry.number for entry in calibrations.in_force_history(c, "tub-7")] == [1, 2, None]
        assert calibrations.all_in_force(c)["tub-7"].calibration_id is None
        spans = [(one.in_force_from, one.in_force_to) for one in calibrations.all_for(c, "tub-7")]
    assert spans == [(begun, begun + timedelta(days=4)), (begun + timedelta(days=4), gone)]


def test_what_was_in_force_is_one_query(with_runs, clock):
    add(with_runs, clock, result_of(), "c1")
    put(with_runs, clock, "c1", clock())
    with with_runs.read() as c:
        sent: list[str] = []
        event.listen(c, "before_cursor_execute", lambda _c, _cu, statement, *_rest: sent.append(statement))
        assert calibrations.in_force(c, "tub-7", clock(), clock()) is not None
        assert len(sent) == 1


def test_the_database_refuses_a_reinstated_calibration_without_origin_and_a_width_of_zero(with_runs, clock):
    with pytest.raises(DatabaseError, match="reinstated_names_its_origin"):
        add(with_runs, clock, replace(result_of(), kind="reinstated"))
    parameters = replace(result_of().parameters, width_m=0.0)
    with pytest.raises(DatabaseError, match="positive"):
        add(with_runs, clock, replace(result_of(), parameters=parameters))
    made = add(with_runs, clock, result_of())
    again = add(with_runs, clock, replace(result_of(), kind="reinstated"), "cal2", reinstates=made.calibration_id)
    assert again.reinstates == "cal1"


def test_a_page_holds_runs_and_times_of_each_calibration(with_runs, clock):
    for i in range(5):
        add(with_runs, clock, result_of("early"), f"c{i}")
    put(with_runs, clock, "c3", clock())
    with with_runs.read() as c:
        first = calibrations.page(c, "tub-7", 3, None)
        second = calibrations.page(c, "tub-7", 3, first.after)
    assert [one.number for one in (*first.items, *second.items)] == [5, 4, 3, 2, 1]
    assert second.after is None
    assert all(len(one.result.runs) == 1 for one in first.items)
    assert first.items[1].in_force_from == clock()


def test_an_unknown_calibration_is_named(with_runs):
    with with_runs.read() as c:
        with pytest.raises(NotFound, match="nothing"):
            calibrations.by_id(c, "nothing")
        with pytest.raises(NotFound, match="nothing"):
            calibrations.parameters_by_id(c, "nothing")
        with pytest.raises(NotFound, match="number 9"):
            calibrations.by_number(c, "tub-7", 9)
        assert calibrations.find_by_number(c, "tub-7", 9) is None
        assert calibrations.first_run_at(c, "nothing") is None
