from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

from registry.domain.calibration import InForce
from registry.domain.maintenance import Maintenance
from registry.domain.tolerance import Tolerance
from registry.web.standing import strips_of
from tests.web.test_history import FIRST, PAST, T0
from tests.web.yard import VALUES

IN_FORCE = InForce(1, "tub-7", "c1", 1, T0, T0, "Abel", "why", entered_late=False)
NEWEST_FIRST = [one for one in reversed(PAST.evaluations) if one.result.against == FIRST.calibration_id]


def states(work: Maintenance | None = None, in_force: InForce | None = IN_FORCE) -> list[tuple[str, int]]:
    strips = strips_of(Tolerance(), VALUES.width_m, in_force, NEWEST_FIRST, work)
    return [(strip.state, len(strip.trail)) for strip in strips]


def test_strips_show_the_latest_evaluation_and_the_trail_of_those_before() -> None:
    assert states() == [("within", 6), ("within", 6), ("within", 7)]


def test_what_was_said_against_another_calibration_is_not_shown() -> None:
    assert states(in_force=replace(IN_FORCE, calibration_id="c2", number=2)) == [("not_evaluated", 0)] * 3
    assert states(in_force=None) == [("not_evaluated", 0)] * 3


def test_what_was_said_before_work_that_ended_the_window_is_not_shown() -> None:
    work = Maintenance("m", "tub-7", T0 + timedelta(days=6), "part_fitted", None, None, True, T0, "Tove")
    assert [trail for _, trail in states(work)] == [2, 2, 2]
    after_all = replace(work, done_at=T0 + timedelta(days=29))
    assert states(after_all) == [("not_evaluated", 0)] * 3
