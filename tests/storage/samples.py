"""Entries with real content for the storage tests, each field different, so that an exchanged column is seen."""

from __future__ import annotations

from datetime import datetime, timedelta

import numpy as np

from registry.domain.alert import AlertContent
from registry.domain.calibration import CalibrationResult, CalibrationRun, Observed
from registry.domain.evaluation import Evaluation, EvaluationResult, QuantityFinding
from registry.domain.run import ClosureStatement, Conditions, Misclosure, Run
from registry.domain.vehicle import Parameters
from registry.storage import counts_blob, runs
from registry.storage.engine import Connection

TIME_S = np.arange(0, 40) * 0.05
LEFT = np.cumsum(np.tile([40, 41, 39, 42], 10))
RIGHT = np.cumsum(np.tile([43, 38, 40, 41], 10))
BLOB = counts_blob.encode(TIME_S, LEFT, RIGHT)


def run_of(run_id: str, started_at: datetime, vehicle_id: str = "tub-7", **changed: object) -> Run:
    fields: dict[str, object] = {
        "run_id": run_id,
        "vehicle_id": vehicle_id,
        "run_key": f"key of {run_id}",
        "vehicle_version": 1,
        "started_at": started_at,
        "ended_at": started_at + timedelta(seconds=1.95),
        "duration_s": 1.95,
        "samples": 40,
        "distance_m": 0.563,
        "turned_rad": -0.0125,
        "closure": ClosureStatement(0.5, 0.01, -0.02, 0.51, 2, 0.005, 0.004),
        "conditions": Conditions("post A", "post B", "loop east", "wet gravel", 850.5, "Ida", "Ulf", "tape 3", "calm"),
        "misclosure": Misclosure(0.001, None, -0.003, 0.004),
        "content_digest": "c" * 64,
        "counts_digest": counts_blob.counts_digest(BLOB),
        "use": "usable",
        "reasons": (),
        "recorded_at": started_at + timedelta(minutes=5),
        "recorded_by": "Tove",
    }
    return Run(**(fields | changed))  # type: ignore[arg-type]  # a test changes the fields it names


def add_runs(c: Connection, *added: Run) -> None:
    for run in added:
        runs.add(c, run, BLOB, b"map of " + run.run_id.encode())


def result_of(*run_ids: str, left_mm: float = 0.3477) -> CalibrationResult:
    return CalibrationResult(
        kind="baseline",
        parameters=Parameters(left_mm / 1000.0, 0.0003479, 0.6205),
        covariance_relative=((4.1e-8, 1.2e-8, 0.3e-8), (1.2e-8, 4.2e-8, 0.2e-8), (0.3e-8, 0.2e-8, 2.5e-7)),
        observed=Observed(tick_factor=True, side_ratio=True, width=False),
        runs=tuple(
            CalibrationRun(
                run_id,
                0.9 - 0.1 * i,
                Misclosure(0.01, 0.02, 0.03, None),
                Misclosure(0.001, 0.002, 0.003, None),
                (1e-4, -2e-4, 3e-4),
            )
            for i, run_id in enumerate(run_ids)
        ),
        birge_ratio=1.07,
        coverage_factor=2.31,
        random_error_m_per_sqrt_m=0.0021,
        method_version="fit 1",
        note="after the new tracks",
    )


def evaluation_of(evaluation_id: str, as_of: datetime, against: str | None, vehicle_id: str = "tub-7") -> Evaluation:
    result = EvaluationResult(
        against=against,
        runs_used=12,
        first_run_at=as_of - timedelta(days=9),
        last_run_at=as_of - timedelta(days=1),
        tick_factor=QuantityFinding(-0.0061, 0.0003, True, 0.99),
        side_ratio=QuantityFinding(0.0002, 0.0001, True, 0.01),
        width=QuantityFinding(None, None, False, None),
        fitted=Parameters(0.000345, 0.000346, 0.621),
        fitted_u_relative=(0.0003, 0.0004, 0.0005),
        coverage_factor=2.2,
        finding="beyond",
        message="The tick factor is 0.61 % short.",
    )
    return Evaluation(evaluation_id, vehicle_id, as_of, as_of + timedelta(seconds=3), result, None, "12-40")


def content_of(**changed: object) -> AlertContent:
    fields: dict[str, object] = {
        "kind": "beyond_tolerance",
        "quantity": "tick_factor",
        "message": "The tick factor is 0.61 % short.",
        "consequence": "falls short 61 mm in 10 m",
        "advice": "Drive two straights and propose a baseline.",
        "priority": "medium",
        "act_within": "this shift",
        "size": -0.0061,
        "u": 0.0003,
        "probability_beyond": 0.99,
    }
    return AlertContent(**(fields | changed))  # type: ignore[arg-type]  # a test changes the fields it names
