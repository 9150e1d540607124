from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

from registry.domain.evaluation import QuantityFinding
from registry.storage import evaluations

from .samples import evaluation_of


def test_an_evaluation_comes_back_as_it_was_recorded(services, clock, proposer):
    against = proposer.adopt().calibration_id
    full = replace(evaluation_of("e1", clock(), against), proposed_calibration_id=proposer.propose().calibration_id)
    cannot = QuantityFinding(None, None, False, None)
    blind = replace(
        evaluation_of("e2", clock.move(days=1), None).result,
        tick_factor=cannot,
        side_ratio=cannot,
        fitted=None,
        fitted_u_relative=None,
        coverage_factor=None,
        first_run_at=None,
        last_run_at=None,
        finding="cannot_tell",
    )
    with services.write() as c:
        evaluations.add(c, full)
        evaluations.add(c, replace(evaluation_of("e2", clock(), None), result=blind))
    with services.read() as c:
        assert evaluations.history(c, "tub-7") == [full, replace(evaluation_of("e2", clock(), None), result=blind)]


def test_the_latest_is_the_one_of_the_latest_time_not_the_one_recorded_last(services, clock, vehicle):
    with services.write() as c:
        for name, days in (("new", 0), ("old", 9), ("middle", 4)):
            evaluations.add(c, evaluation_of(name, clock() - timedelta(days=days), None))
    with services.read() as c:
        newest = evaluations.latest(c, "tub-7")
        assert newest is not None
        assert newest.evaluation_id == "new"
        earlier = evaluations.latest(c, "tub-7", clock() - timedelta(days=2))
        assert earlier is not None
        assert earlier.evaluation_id == "middle"
        assert evaluations.latest(c, "tub-7", clock() - timedelta(days=20)) is None
        assert {name: one.evaluation_id for name, one in evaluations.latest_all(c).items()} == {"tub-7": "new"}
        first = evaluations.page(c, "tub-7", 2, None)
        rest = evaluations.page(c, "tub-7", 2, first.after)
    assert [one.evaluation_id for one in (*first.items, *rest.items)] == ["new", "middle", "old"]
