"""Evaluations: scheduled looks at recent runs against the calibration in force."""

from __future__ import annotations

from flask import Response

from registry.api import bodies, fields
from registry.api.bodies import Answer, Described, PageAnswer, PageQuery, VehiclePath
from registry.api.document import resource
from registry.api.keys import needs, services
from registry.domain.evaluation import Evaluation, Finding, QuantityFinding
from registry.storage import evaluations as stored
from registry.storage import vehicles

doors = resource("evaluations")


class QuantityAnswer(Answer):
    """Deviation of one quantity from the calibration in force; null where the runs cannot tell."""

    deviation_percent: float | None
    u_percent: float | None
    observed: bool
    probability_beyond: float | None


class EvaluationAnswer(Answer):
    """An evaluation. `calibration_id` is the calibration that it proposed."""

    evaluation_id: str
    vehicle_id: str
    as_of: fields.Time
    recorded_at: fields.Time
    runs_used: int
    tick_factor: QuantityAnswer
    side_ratio: QuantityAnswer
    width: QuantityAnswer
    finding: Finding
    message: str
    calibration_id: str | None


def described(evaluation: Evaluation) -> Described:
    """An evaluation as the doors write it."""
    result = evaluation.result
    return {
        "evaluation_id": evaluation.evaluation_id,
        "vehicle_id": evaluation.vehicle_id,
        "as_of": fields.instant(evaluation.as_of),
        "recorded_at": fields.instant(evaluation.recorded_at),
        "runs_used": result.runs_used,
        "tick_factor": _quantity(result.tick_factor),
        "side_ratio": _quantity(result.side_ratio),
        "width": _quantity(result.width),
        "finding": result.finding,
        "message": result.message,
        "calibration_id": evaluation.proposed_calibration_id,
    }


def _quantity(found: QuantityFinding) -> Described:
    return {
        "deviation_percent": fields.percent(found.deviation),
        "u_percent": fields.percent(found.u),
        "observed": found.observed,
        "probability_beyond": found.probability_beyond,
    }


@doors.get("/vehicles/<vehicle_id>/evaluations", responses={200: PageAnswer[EvaluationAnswer]})
@needs("reader")
def list_evaluations(path: VehiclePath, query: PageQuery) -> Response:
    """A vehicle's evaluations, newest first."""
    with services().read() as c:
        vehicles.current(c, path.vehicle_id)
        page = stored.page(c, path.vehicle_id, query.limit, query.after)
    return bodies.reply_page(page, described)
