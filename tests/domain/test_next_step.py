"""The one sentence at the top of a vehicle's page."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime

from registry.domain.alert import Alert, AlertContent
from registry.domain.calibration import Calibration, CalibrationResult, Observed
from registry.domain.evaluation import EvaluationResult, QuantityFinding
from registry.domain.maintenance import Maintenance
from registry.domain.next_step import NOTHING_TO_DO, TELLING_RUNS, next_step
from registry.domain.vehicle import Parameters

AT = datetime(2031, 5, 4, 12, 0, tzinfo=UTC)

ALERT = Alert(
    "a1",
    "v1",
    AlertContent(
        "beyond_tolerance",
        "width",
        "Effective width is beyond.",
        "turns short",
        "Check the tracks.",
        "medium",
        "this shift",
    ),
    "unacknowledged",
    AT,
    AT,
    AT,
)
PROPOSAL = Calibration(
    "c4",
    "v1",
    4,
    CalibrationResult(
        "evaluation",
        Parameters(1e-4, 1e-4, 0.5),
        ((1e-8, 0, 0), (0, 1e-8, 0), (0, 0, 1e-8)),
        Observed(True, True, True),
    ),
    "proposed",
    None,
    None,
    None,
    AT,
    "schedule:pass",
)
WORK = Maintenance("m1", "v1", AT, "part_fitted", "left", None, True, AT, "Ada")


def test_a_quiet_vehicle_asks_for_nothing() -> None:
    assert next_step((), (), "good", None) == NOTHING_TO_DO


def test_a_vehicle_with_nothing_in_force_asks_for_provisional_values_before_it_drives() -> None:
    step = next_step((), (), None, None)
    assert (step.act_within, step.leads_to) == ("before it drives", "provisional")


def test_a_vehicle_with_only_a_proposal_asks_for_the_decision_before_it_drives() -> None:
    step = next_step((ALERT,), (PROPOSAL,), None, None)
    assert (step.act_within, step.leads_to, step.target_id) == ("before it drives", "proposal", "c4")


def test_the_most_urgent_alert_speaks_before_a_proposal_and_the_advice_is_the_sentence() -> None:
    step = next_step((ALERT,), (PROPOSAL,), "good", None)
    assert (step.sentence, step.why, step.target_id) == ("Check the tracks.", "Effective width is beyond.", "a1")


def test_an_alert_that_no_longer_holds_asks_only_for_acknowledgement() -> None:
    step = next_step((replace(ALERT, standing="returned"),), (), "good", None)
    assert step.act_within == "this week"
    assert step.sentence.startswith("Acknowledge")


def test_a_shelved_alert_asks_for_nothing() -> None:
    assert next_step((replace(ALERT, standing="shelved"),), (), "good", None) == NOTHING_TO_DO


def test_maintenance_that_awaits_a_calibration_asks_for_runs_and_names_the_work() -> None:
    step = next_step((), (PROPOSAL,), "questioned", WORK)
    assert step.leads_to == "baseline"
    assert "2031-05-04" in step.why
    assert "new track, tyre or wheel fitted" in step.why


def test_provisional_values_ask_for_calibration_runs() -> None:
    step = next_step((), (), "provisional", None)
    assert (step.act_within, step.leads_to) == ("this week", "baseline")


def test_provisional_values_with_a_proposal_ask_for_the_decision() -> None:
    assert next_step((), (PROPOSAL,), "provisional", None).leads_to == "proposal"


SEEN = QuantityFinding(0.0001, 0.0002, observed=True, probability_beyond=0.0)
UNTOLD = QuantityFinding(None, None, observed=False, probability_beyond=None)
PARTLY = EvaluationResult(
    "c1",
    TELLING_RUNS,
    AT,
    AT,
    SEEN,
    SEEN,
    UNTOLD,
    Parameters(1e-4, 1e-4, 0.5),
    (1e-4, 1e-4, 1.0),
    2.0,
    "cannot_tell",
    "",
)


def test_many_runs_that_leave_a_quantity_untold_ask_for_the_run_that_tells_it() -> None:
    step = next_step((), (), "good", None, PARTLY)
    assert step.act_within == "this week"
    assert "effective width: turn on the spot" in step.why


def test_a_few_runs_may_leave_a_quantity_untold_for_now() -> None:
    assert next_step((), (), "good", None, replace(PARTLY, runs_used=TELLING_RUNS - 1)) == NOTHING_TO_DO
