"""What to do next with a vehicle, as one sentence: the most urgent of what is open."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

from registry.domain.alert import ActWithin, Alert
from registry.domain.boot import Condition
from registry.domain.calibration import Calibration
from registry.domain.evaluation import EvaluationResult
from registry.domain.maintenance import MAINTENANCE_WORDS, Maintenance
from registry.domain.settling import cannot_tell

#: Most urgent first.
ACT_WITHIN: tuple[ActWithin, ...] = get_args(ActWithin)

LeadsTo = Literal["alert", "provisional", "baseline", "proposal", "nothing"]


@dataclass(frozen=True)
class NextStep:
    """What to do, within what time (None: nothing), why, and which alert or calibration it leads to."""

    act_within: ActWithin | None
    sentence: str
    why: str
    leads_to: LeadsTo
    target_id: str | None = None


#: After so many runs, what they do not tell will not come by itself: the vehicle drives courses that cannot.
TELLING_RUNS = 10

NOTHING_TO_DO = NextStep(None, "Nothing to do.", "", "nothing")


def _of_alert(alert: Alert) -> NextStep:
    if alert.standing == "returned":
        sentence = "Acknowledge the alert: what it said no longer holds."
        return NextStep("this week", sentence, alert.content.message, "alert", alert.alert_id)
    content = alert.content
    return NextStep(content.act_within, content.advice, content.message, "alert", alert.alert_id)


def _of_proposal(proposal: Calibration) -> NextStep:
    sentence = f"Decide on calibration {proposal.number}: put it into force or withdraw it."
    why = "It is proposed and waits for an approver."
    return NextStep("this week", sentence, why, "proposal", proposal.calibration_id)


def next_step(
    alerts: Sequence[Alert],
    proposals: Sequence[Calibration],
    condition: Condition | None,
    awaiting: Maintenance | None,
    latest: EvaluationResult | None = None,
) -> NextStep:
    """The most urgent of what is open for one vehicle.

    Parameters
    ----------
    alerts
        The vehicle's open alerts; shelved ones ask for nothing.
    proposals
        Its calibrations that are proposed and not yet decided.
    condition
        Of the parameters it is to drive on; None when nothing is in force.
    awaiting
        Maintenance that ended the window and after which no new calibration came into force.
    latest
        What the last evaluation found.
    """
    steps: list[NextStep] = []
    if condition is None and not proposals:
        sentence = "Enter provisional values, so that it can drive its calibration runs."
        steps.append(NextStep("before it drives", sentence, "Nothing is in force.", "provisional"))
    elif condition is None:
        sentence = f"Decide on calibration {proposals[0].number}: it has nothing to drive on until one is in force."
        steps.append(
            NextStep("before it drives", sentence, "Nothing is in force.", "proposal", proposals[0].calibration_id)
        )
    steps.extend(_of_alert(alert) for alert in alerts if alert.standing not in ("shelved", "closed"))
    if awaiting is not None:
        work = MAINTENANCE_WORDS[awaiting.kind]
        sentence = "Drive calibration runs and propose a new baseline."
        why = f"Its parameters may have moved with the work of {awaiting.done_at:%Y-%m-%d}: {work}."
        steps.append(NextStep("this shift", sentence, why, "baseline"))
    if condition == "provisional" and not proposals:
        sentence = "Drive its calibration runs and propose a baseline."
        steps.append(NextStep("this week", sentence, "It drives on provisional values.", "baseline"))
    if condition is not None:
        steps.extend(_of_proposal(proposal) for proposal in proposals)
    if not steps and latest is not None and latest.finding == "cannot_tell" and latest.runs_used >= TELLING_RUNS:
        untold = cannot_tell((latest.tick_factor.observed, latest.side_ratio.observed, latest.width.observed))
        return NextStep("this week", "Drive a run that tells the rest.", untold, "nothing")
    if not steps:
        return NOTHING_TO_DO
    return min(steps, key=lambda step: ACT_WITHIN.index(step.act_within or ACT_WITHIN[-1]))
