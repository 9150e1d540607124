"""One scheduled look at a vehicle: judge its recent runs, propose and alert.

The fit happens outside the write; the write checks that what it started from still holds. An evaluation never changes
what is in force: it proposes, and a person adopts.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from registry.domain import judgement
from registry.domain.calibration import Calibration, InForce
from registry.domain.evaluation import Evaluation
from registry.domain.maintenance import Maintenance
from registry.domain.tolerance import QUANTITIES, Quantity
from registry.domain.vehicle import VehicleVersion
from registry.numerics import closure_map
from registry.procedures import alerting, proposals, standing_questions
from registry.procedures.boot_sheets import awaiting, refresh_sheet
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
    """What a pass looks at for one vehicle; ``inputs`` tells whether anything is new since the last evaluation.

    ``late`` is whether a later time was judged before: then this look is history. It is recorded, but alerts and
    proposals are about the present and stay as the later look left them.
    """

    version: VehicleVersion
    in_force: InForce | None
    work: Maintenance | None
    inputs: str
    last: Evaluation | None
    late: bool

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
        lost = _lost_ground(c, question, answer)
        wishes = _wishes(c, services, question, question.in_force, as_of)
    if answer is None and not lost and not wishes:
        return None
    with services.write() as c:
        _still_ours(c, services, holder)
        if lost:
            _leave_ground(c, services, question, as_of, lost)
        evaluation, spoken = None, question.last is None or question.moved or bool(lost or wishes)
        if answer is not None and _same_ground(c, question, vehicle_id, as_of):
            evaluation, alerted = _record(c, services, question, answer, as_of)
            spoken = spoken or alerted
        if wishes:
            # Asked again: another calibration may have come into force, or a boot in, while the runs were fitted.
            for wish in _wishes(c, services, question, in_force_store.in_force(c, vehicle_id, as_of), as_of):
                standing_questions.grant(c, services, vehicle_id, wish, as_of)
        if spoken:  # A quiet look moves nothing that the vehicle is told at boot.
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
    last = evaluation_store.latest(c, vehicle_id)
    late = last is not None and last.as_of > as_of
    if late:
        last = evaluation_store.latest(c, vehicle_id, as_of)
    return _Question(version, in_force, work, inputs, last, late)


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
    return _Answer(judge(c, runs, calibration, question.version, as_of), calibration) if runs else None


def _evidence_end(c: Connection, calibration: Calibration) -> datetime:
    """Runs after those that made a calibration are held against it; without such, those since it came into force."""
    last = calibration_store.last_run_at(c, calibration.calibration_id)
    return last or calibration.in_force_from or calibration.recorded_at


def _same_ground(c: Connection, question: _Question, vehicle_id: str, as_of: datetime) -> bool:
    """Whether what the fit started from is still so: what is in force at that time, and the evaluation before."""
    held = in_force_store.in_force(c, vehicle_id, as_of)
    last = evaluation_store.latest(c, vehicle_id, as_of)
    overtaken = last is not None and (question.last is None or last.evaluation_id != question.last.evaluation_id)
    return held is not None and held.calibration_id == question.held and not overtaken


def _wishes(
    c: Connection, services: Services, question: _Question, in_force: InForce | None, as_of: datetime
) -> list[standing_questions.Wish]:
    return [] if question.late else standing_questions.wishes(c, services, question.version, in_force, as_of)


def _lost_ground(c: Connection, question: _Question, answer: _Answer | None) -> str:
    """Why what the last evaluation said and proposed no longer holds, though no new one says so; empty while it does.

    Either another calibration is in force than it was held against, or none of the runs behind it is left: they were
    set aside, or work has ended their window.
    """
    if question.late or question.last is None:
        return ""
    emptied = answer is None and question.new and question.held is not None
    if not question.moved and not emptied:
        return ""
    vehicle_id = question.version.vehicle_id
    stale = any(one.content.kind == "beyond_tolerance" for one in alert_store.open_for(c, vehicle_id))
    if not stale and not calibration_store.open_proposals(c, vehicle_id, "evaluation"):
        return ""
    return "another calibration is in force" if question.moved else "no run is left that says so"


def _leave_ground(c: Connection, services: Services, question: _Question, as_of: datetime, why: str) -> None:
    """Clear what was said against another calibration, or by runs that no longer count, and what it proposed."""
    alerting.clear_deviations(c, services, question.version.vehicle_id, as_of, why)
    proposals.drop(c, services, question.version.vehicle_id, why)


def _record(
    c: Connection, services: Services, question: _Question, answer: _Answer, as_of: datetime
) -> tuple[Evaluation, bool]:
    """Write what was found; answer it, and whether an alert on a deviation stood before or stands now."""
    vehicle_id, now = question.version.vehicle_id, services.now()
    verdict = answer.verdict
    for run_id, item in verdict.new_maps.items():
        run_store.put_map(c, run_id, closure_map.encode(item))
    causes = _causes(c, vehicle_id)
    standing = [] if question.late else _holding(causes, verdict)
    proposal = None
    if not question.late and question.held == _present(c, vehicle_id):
        proposal = proposals.settle(c, services, vehicle_id, question.held, verdict.proposal, keep=bool(standing))
    evaluation = Evaluation(
        evaluation_id=services.new_id(),
        vehicle_id=vehicle_id,
        as_of=as_of,
        recorded_at=now,
        result=verdict.result,
        proposed_calibration_id=None
        if proposal is None or verdict.result.finding != "beyond"
        else proposal.calibration_id,
        inputs=question.inputs,
    )
    evaluation_store.add(c, evaluation)
    what = {
        "evaluation_id": evaluation.evaluation_id,
        "finding": verdict.result.finding,
        "message": verdict.result.message,
    }
    journal.write(c, now, "schedule", "evaluated", vehicle_id, what)
    if not question.late and (causes or standing):
        _follow_alerts(c, services, question, answer, standing, proposal, as_of)
    return evaluation, bool(causes or standing)


def _present(c: Connection, vehicle_id: str) -> str | None:
    """What is in force now. A look at a time when it was another proposes nothing: nobody could adopt it."""
    entry = in_force_store.in_force(c, vehicle_id)
    return None if entry is None else entry.calibration_id


def _causes(c: Connection, vehicle_id: str) -> set[str]:
    """Deviations of which an alert stands."""
    return {
        one.content.cause()
        for one in alert_store.open_for(c, vehicle_id)
        if one.standing != "returned" and one.content.kind == "beyond_tolerance"
    }


def _holding(causes: set[str], verdict: Verdict) -> list[Quantity]:
    """Quantities of which an alert stands after this verdict: raised by it, kept in the dead band, or not spoken of."""
    found: list[Quantity] = []
    for quantity, item, sure in zip(QUANTITIES, verdict.result.quantities(), verdict.confirmed, strict=True):
        stands = f"beyond_tolerance:{quantity}" in causes
        holds = judgement.holds_beyond(item, was_open=stands, confirmed=sure)
        if holds or (holds is None and stands):
            found.append(quantity)
    return found


def _follow_alerts(
    c: Connection,
    services: Services,
    question: _Question,
    answer: _Answer,
    standing: Sequence[Quantity],
    proposal: Calibration | None,
    as_of: datetime,
) -> None:
    """Let the alerts on deviations say what holds; one on a quantity that these runs do not tell stays as it is."""
    vehicle_id, stated, result = question.version.vehicle_id, question.version.statement, answer.verdict.result
    for quantity, item in zip(QUANTITIES, result.quantities(), strict=True):
        if quantity not in standing and item.observed:
            alerting.clear(c, services, vehicle_id, f"beyond_tolerance:{quantity}", as_of, result.message)
        elif item.observed:
            content = judgement.beyond_tolerance(
                stated.name,
                quantity,
                result,
                stated.tolerance,
                answer.against,
                proposal,
                drive=stated.drive,
                work=awaiting(c, vehicle_id, as_of),
            )
            alerting.raise_or_update(c, services, vehicle_id, content, as_of)


def _still_ours(c: Connection, services: Services, holder: Holder | None) -> None:
    if holder is not None and not leases.holds(c, holder.name, holder.holder, holder.fence, services.now()):
        raise LeaseLost("another process took the pass over")
