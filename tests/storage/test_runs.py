from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from registry.domain.run import ClosureStatement, Conditions, RunState
from registry.errors import NotFound
from registry.storage import runs
from registry.storage.engine import DatabaseError

from .samples import BLOB, LEFT, RIGHT, TIME_S, add_runs, run_of


def test_a_run_comes_back_as_it_was_recorded(services, clock, vehicle):
    full = run_of("full", clock(), use="set aside", reasons=("no motion", "overlaps"))
    bare = run_of(
        "bare",
        clock(),
        closure=ClosureStatement(1.0, None, None, None, None, 0.01, None),
        conditions=Conditions(),
        misclosure=None,
    )
    with services.write() as c:
        add_runs(c, full, bare)
    with services.read() as c:
        assert runs.by_id(c, "full") == full
        assert runs.find_by_key(c, "tub-7", "key of bare") == bare
        assert runs.by_ids(c, ["bare", "full"]) == [bare, full]
        assert runs.find_by_key(c, "tub-7", "another key") is None


def test_counts_and_maps_come_back_exactly(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("one", clock()))
        runs.add(c, run_of("two", clock()), BLOB, None)
    with services.read() as c:
        counts = runs.counts(c, "one")
        assert runs.maps(c, ["one", "two"]) == {"one": b"map of one"}
    assert np.array_equal(counts.time_s, TIME_S)
    assert np.array_equal(counts.left, LEFT)
    assert np.array_equal(counts.right, RIGHT)
    with services.write() as c:
        runs.put_map(c, "two", b"made later")
        runs.put_map(c, "two", b"made again")
    with services.read() as c:
        assert runs.maps(c, ["two"]) == {"two": b"made again"}


def test_the_same_key_twice_for_one_vehicle_is_refused_by_the_database(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("one", clock()))
    with pytest.raises(DatabaseError, match="UNIQUE"), services.write() as c:
        add_runs(c, run_of("two", clock(), run_key="key of one"))
    with services.read() as c, pytest.raises(NotFound):
        runs.by_id(c, "two")


def test_what_a_run_is_used_for_is_its_latest_state_and_the_history_stays(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("one", clock()))
        aside = RunState("set aside", ("wheel over a joint",), clock.move(hours=1), "Abel")
        runs.add_state(c, "one", aside)
    with services.read() as c:
        assert runs.by_id(c, "one").use == "set aside"
        assert runs.by_id(c, "one").reasons == ("wheel over a joint",)
        assert [state.use for state in runs.states(c, "one")] == ["usable", "set aside"]
        assert runs.states(c, "one")[1] == aside
        assert runs.usable(c, "tub-7") == []
    with services.write() as c:
        runs.add_state(c, "one", RunState("usable", (), clock.move(hours=1), "Abel"))
    with services.read() as c:
        assert [run.run_id for run in runs.usable(c, "tub-7")] == ["one"]


def test_usable_runs_are_those_of_the_window_newest_first(services, clock, vehicle):
    begun = [clock() - timedelta(days=day) for day in range(6)]
    with services.write() as c:
        add_runs(c, *(run_of(f"day{i}", at) for i, at in enumerate(begun)))
        add_runs(c, run_of("aside", begun[2] + timedelta(hours=1), use="set aside", reasons=("slip",)))
    with services.read() as c:
        ids = [run.run_id for run in runs.usable(c, "tub-7")]
        assert ids == ["day0", "day1", "day2", "day3", "day4", "day5"]
        window = runs.usable(c, "tub-7", started_from=begun[4], ended_until=begun[1] + timedelta(seconds=1))
        assert [run.run_id for run in window] == ["day2", "day3", "day4"]
        assert [run.run_id for run in runs.usable(c, "tub-7", limit=2)] == ["day0", "day1"]
        assert runs.latest_end(c, "tub-7", begun[2] + timedelta(hours=2)) == begun[2] + timedelta(seconds=1.95)
        assert runs.latest_end(c, "tub-7", begun[5]) is None


def test_overlapping_runs_share_some_time_and_not_just_an_end(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("one", clock()))
        later = clock() + timedelta(seconds=1.95)
        add_runs(c, run_of("after", later), run_of("within", clock() + timedelta(seconds=1)))
    with services.read() as c:
        found = runs.overlapping(c, "tub-7", clock(), later)
        assert [run.run_id for run in found] == ["one", "within"]


def test_the_mark_moves_with_every_run_and_state_up_to_a_time_and_with_nothing_else(services, clock, vehicle):
    def mark(until):
        with services.read() as c:
            return runs.changes_mark(c, "tub-7", until)

    early = clock()
    with services.write() as c:
        add_runs(c, run_of("one", early))
    clock.move(days=1)
    first = mark(clock())
    assert mark(early) != first
    with services.write() as c:
        add_runs(c, run_of("later", clock()))
    assert mark(early + timedelta(hours=1)) == first
    assert mark(clock() + timedelta(hours=1)) != first
    with services.write() as c:
        runs.add_state(c, "one", RunState("set aside", ("slip",), clock(), "Abel"))
    assert mark(early + timedelta(hours=1)) != first


def test_pages_of_runs_that_started_together_have_neither_gap_nor_repeat(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, *(run_of(f"r{i}", clock() + timedelta(minutes=i // 4)) for i in range(11)))
    with services.read() as c:
        seen, after = [], None
        while True:
            page = runs.page(c, "tub-7", 3, after)
            seen += [run.run_id for run in page.items]
            after = page.after
            if after is None:
                break
            assert set(after) <= set("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-_")
    assert seen == [f"r{i}" for i in reversed(range(11))]


def test_an_unknown_run_is_named(services, clock, vehicle):
    with services.write() as c:
        add_runs(c, run_of("one", clock()))
    with services.read() as c:
        with pytest.raises(NotFound, match="none"):
            runs.by_id(c, "none")
        with pytest.raises(NotFound, match="none"):
            runs.by_ids(c, ["one", "none"])
        with pytest.raises(NotFound, match="none"):
            runs.counts(c, "none")


def test_a_run_of_a_version_that_does_not_exist_is_refused_by_the_database(services, clock, vehicle):
    with pytest.raises(DatabaseError, match="FOREIGN KEY"), services.write() as c:
        add_runs(c, replace(run_of("one", clock()), vehicle_version=3))


def test_the_newest_sixty_of_many_runs_are_found_without_reading_all(services, clock, vehicle):
    with services.read() as c:
        statement = (
            "EXPLAIN QUERY PLAN SELECT run_id FROM runs WHERE vehicle_id = 'tub-7' "
            "ORDER BY started_at DESC, sequence DESC LIMIT 60"
        )
        plan = " ".join(str(row) for row in c.exec_driver_sql(statement))
    assert "ix_runs_vehicle_id_started_at_sequence" in plan
    assert "TEMP B-TREE" not in plan
