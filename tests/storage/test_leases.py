from __future__ import annotations

from registry.storage import leases


def test_a_holder_keeps_its_fence_by_renewing_and_nobody_else_gets_in(services, clock):
    with services.write() as c:
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 1
        clock.move(seconds=59)
        assert leases.acquire(c, "pass", "two", clock(), 60.0) is None
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 1
        clock.move(seconds=59)
        assert leases.holds(c, "pass", "one", 1, clock())
        assert not leases.is_free(c, "pass", "two", clock())


def test_the_fence_grows_with_every_change_of_holder_and_with_every_lapse(services, clock):
    with services.write() as c:
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 1
        clock.move(seconds=60)
        assert not leases.holds(c, "pass", "one", 1, clock())
        assert leases.acquire(c, "pass", "two", clock(), 60.0) == 2
        clock.move(seconds=61)
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 3
        clock.move(seconds=61)
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 4
        assert not leases.holds(c, "pass", "one", 3, clock())


def test_a_released_lease_is_free_at_once_and_only_its_holder_can_release_it(services, clock):
    with services.write() as c:
        leases.acquire(c, "pass", "one", clock(), 60.0)
        leases.release(c, "pass", "two", clock())
        assert leases.holds(c, "pass", "one", 1, clock())
        leases.release(c, "pass", "one", clock())
        assert not leases.holds(c, "pass", "one", 1, clock())
        assert leases.acquire(c, "pass", "two", clock(), 60.0) == 2


def test_leases_of_different_names_do_not_meet(services, clock):
    with services.write() as c:
        assert leases.acquire(c, "pass", "one", clock(), 60.0) == 1
        assert leases.acquire(c, "tidy", "two", clock(), 60.0) == 1


def test_when_the_work_was_done_outlives_the_holder_and_is_not_moved_by_a_late_one(services, clock):
    with services.write() as c:
        assert leases.done_at(c, "pass") is None
        leases.acquire(c, "pass", "one", clock(), 60.0)
        done = clock()
        leases.note_done(c, "pass", "one", 1, done)
        clock.move(seconds=61)
        leases.acquire(c, "pass", "two", clock(), 60.0)
        leases.note_done(c, "pass", "one", 1, clock())
        assert leases.done_at(c, "pass") == done
