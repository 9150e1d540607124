"""One scheduled look at a vehicle: judge its recent runs, propose and alert.

The fit happens outside the write; the write checks that what it started from still holds. An evaluation never changes
what is in force: it proposes, and a person adopts.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

import numpy as np

from registry.domain import judgement
from registry.domain.calibration import Calibration, CalibrationResult, InForce
from registry.domain.evaluation import Evaluation
from registry.domain.maintenance import Maintenance
from registry.domain.tolerance import QUANTITIES
from registry.domain.vehicle import VehicleVersion
from registry.numerics import closure_map
from registry.procedures import alerting, standing_questions
from registry.procedures.boot_sheets import refresh_sheet
from registry.procedures.evidence import parameter_array
from registry.procedures.window_fit import Verdict, judge
from registry.services import Services
from registry.storage import alerts as alert_store
from registry.storage import calibrations as calibration_store
from registry.storage import evaluations as evaluation_store
from registry.storage import in_force as in_force_store
from registry.storage import journal, leases
from registry.storage import maintenance as maintenance_store
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

#: A new proposal replaces an open one when it differs by more than its own standard uncertainty, or is this much surer.
_SURER = 0.7


@dataclass(frozen=True)
class Holder:
    """The lease a pass works under: what it writes is refused once another holds it."""

    name: str
    holder: str
    fence: int


class LeaseLost(Exception):  # noqa: N818 - says what happened
    """Another process took the pass over; nothing of this one is written any more."""


@dataclass(frozen=True)
class _Question:
    """What a pass looks at for one vehicle; ``inputs`` tells whether anything is new since the last evaluation."""

    version: VehicleVersion
    in_force: InForce | None
    work: Maintenance | None
    inputs: str
    last: Evaluation | None

    @property
    def held(self) -> str | None:
        """The calibration in force."""
        return None if self.in_force is None else self.in_force.calibration_id

    @property
    def new(self) -> bool:
        """Whether there is something new since the last evaluation."""
        return self.last is None or self.last.inputs != self.inputs

    @property
    def moved(self) -> bool:
        """Whether another calibration is in force than the one that the last evaluation was against."""
        return self.last is not None and self.last.result.against != self.held


@dataclass(frozen=True)
class _Answer:
    """The verdict of the runs, and the calibration that they were held against."""

    verdict: Verdict
    against: Calibration


def evaluate_vehicle(
    services: Services, vehicle_id: str, as_of: datetime, *, holder: Holder | None = None, force: bool = False
) -> Evaluation | None:
    """Judge a vehicle as of a time with everything known now; None when nothing is new since its last evaluation.

    Parameters
    ----------
    holder
        The lease of the pass, if it works under one.
    force
        Evaluate though nothing is new.

    Raises
    ------
    LeaseLost
        The lease went to another process before the result could be written.
    """
    with services.read() as c:
        question = _ask(c, vehicle_id, as_of)
        answer = _answer(c, services, question, as_of) if question.new or force else None
        wishes = standing_questions.wishes(c, services, question.version, question.in_force, as_of)
    if answer is None and not wishes and not question.moved:
        return None
    with services.write() as c:
        _still_ours(c, services, holder)
        if question.moved:
            alerting.clear_for_another(c, services, vehicle_id, as_of, "another calibration is in force")
        evaluation = None
        if answer is not None and _same_ground(c, question, vehicle_id, as_of):
            evaluation = _record(c, services, question, answer, as_of)
        for wish in wishes:
            standing_questions.grant(c, services, vehicle_id, wish, as_of)
        refresh_sheet(c, vehicle_id, services.now())
    return evaluation


def _ask(c: Connection, vehicle_id: str, as_of: datetime) -> _Question:
    version = vehicle_store.at(c, vehicle_id, as_of)
    in_force = in_force_store.in_force(c, vehicle_id, as_of)
    work = maintenance_store.latest_window_end(c, vehicle_id, as_of)
    parts = (
        "" if in_force is None or in_force.calibration_id is None else in_force.calibration_id,
        str(version.version),
        "" if work is None else work.maintenance_id,
        run_store.changes_mark(c, vehicle_id, as_of),
    )
    inputs = hashlib.sha256("|".join(parts).encode()).hexdigest()[:32]
    return _Question(version, in_force, work, inputs, evaluation_store.latest(c, vehicle_id, as_of))


def _answer(c: Connection, services: Services, question: _Question, as_of: datetime) -> _Answer | None:
    """What the runs since the calibration and the last work say; None without either.

    A provisional calibration is a guess to drive the first runs on, not something to hold runs against.
    """
    if question.held is None:
        return None
    calibration = calibration_store.by_id(c, question.held)
    if calibration.result.kind == "provisional":
        return None
    begin = _evidence_end(c, calibration)
    if question.work is not None:
        begin = max(begin, question.work.done_at)
    made = {one.run_id for one in calibration.result.runs}
    recent = run_store.usable(
        c, calibration.vehicle_id, started_from=begin, ended_until=as_of, limit=services.settings.window_runs
    )
    runs = tuple(run for run in reversed(recent) if run.run_id not in made)
    return _Answer(judge(c, runs, calibration, question.version), calibration) if runs else None


def _evidence_end(c: Connection, calibration: Calibration) -> datetime:
    """Runs after those that made a calibration are held against it; without such, those since it came into force."""
    last = calibration_store.last_run_at(c, calibration.calibration_id)
    return last or calibration.in_force_from or calibration.recorded_at


def _same_ground(c: Connection, question: _Question, vehicle_id: str, as_of: datetime) -> bool:
    """Whether the calibration that the fit started from is still the one in force at that time."""
    held = in_force_store.in_force(c, vehicle_id, as_of)
    return held is not None and held.calibration_id == question.held


def _record(c: Connection, services: Services, question: _Question, answer: _Answer, as_of: datetime) -> Evaluation:
    vehicle_id, now = question.version.vehicle_id, services.now()
    verdict = answer.verdict
    for run_id, item in verdict.new_maps.items():
        run_store.put_map(c, run_id, closure_map.encode(item))
    proposal = _keep_one_proposal(c, services, question, verdict.proposal)
    evaluation = Evaluation(
        evaluation_id=services.new_id(),
        vehicle_id=vehicle_id,
        as_of=as_of,
        recorded_at=now,
        result=verdict.result,
        proposed_calibration_id=None if proposal is None else proposal.calibration_id,
        inputs=question.inputs,
    )
    evaluation_store.add(c, evaluation)
    what = {
        "evaluation_id": evaluation.evaluation_id,
        "finding": verdict.result.finding,
        "message": verdict.result.message,
    }
    journal.write(c, now, "schedule", "evaluated", vehicle_id, what)
    _follow_alerts(c, services, question, answer, proposal, as_of)
    return evaluation


def _keep_one_proposal(
    c: Connection, services: Services, question: _Question, wanted: CalibrationResult | None
) -> Calibration | None:
    """One open proposal of an evaluation a vehicle: kept while it says the same, else superseded by the new one."""
    vehicle_id, now = question.version.vehicle_id, services.now()
    held = question.held
    standing = calibration_store.open_proposals(c, vehicle_id, "evaluation")
    if wanted is not None and standing and standing[-1].based_on == held and _says_the_same(standing[-1], wanted):
        return standing[-1]
    for old in standing:
        reason = "a later evaluation says otherwise"
        calibration_store.add_standing(c, old.calibration_id, "superseded", now, "schedule", reason)
    if wanted is None:
        return None
    made = calibration_store.add(c, services.new_id(), vehicle_id, wanted, held, now, "schedule")
    what = {"calibration_id": made.calibration_id, "number": made.number, "kind": "evaluation"}
    journal.write(c, now, "schedule", "calibration proposed", vehicle_id, what)
    return made


def _says_the_same(old: Calibration, new: CalibrationResult) -> bool:
    array = parameter_array(new.parameters)
    moved = np.abs(array / parameter_array(old.result.parameters) - 1.0)
    u_new = np.sqrt(np.diag(np.array(new.covariance_relative)))
    u_old = np.sqrt(np.diag(np.array(old.result.covariance_relative)))
    return bool(np.all(moved <= u_old) and np.all(u_new > _SURER * u_old) and old.result.observed == new.observed)


def _follow_alerts(
    c: Connection,
    services: Services,
    question: _Question,
    answer: _Answer,
    proposal: Calibration | None,
    as_of: datetime,
) -> None:
    vehicle_id, stated, verdict = question.version.vehicle_id, question.version.statement, answer.verdict
    open_causes = {one.content.cause() for one in alert_store.open_for(c, vehicle_id) if one.standing != "returned"}
    for index, quantity in enumerate(QUANTITIES):
        item = verdict.result.quantities()[index]
        cause = f"beyond_tolerance:{quantity}"
        holds = judgement.holds_beyond(item, was_open=cause in open_causes, confirmed=verdict.confirmed[index])
        if holds is True:
            content = judgement.beyond_tolerance(
                stated.name, quantity, verdict.result, stated.tolerance, answer.against, proposal
            )
            alerting.raise_or_update(c, services, vehicle_id, content, as_of)
        elif holds is False:
            alerting.clear(c, services, vehicle_id, cause, as_of, verdict.result.message)


def _still_ours(c: Connection, services: Services, holder: Holder | None) -> None:
    if holder is not None and not leases.holds(c, holder.name, holder.holder, holder.fence, services.now()):
        raise LeaseLost("another process took the pass over")


def vehicles_to_look_at(c: Connection, vehicle_ids: Sequence[str] | None) -> list[str]:
    """The vehicles of a pass: those named, or all."""
    known = [version.vehicle_id for version in vehicle_store.all_current(c)]
    if vehicle_ids is None:
        return known
    for vehicle_id in vehicle_ids:
        vehicle_store.current(c, vehicle_id)
    return list(vehicle_ids)
