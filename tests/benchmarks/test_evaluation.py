"""What an evaluation costs, from the record to its row, and that it does not ask how long the runs were."""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from pathlib import Path
from time import process_time

import pytest

from registry.procedures.evaluation import evaluate_vehicle
from tests.conftest import StandingClock
from tests.numerics.drives import Leg
from tests.procedures.drives_on_record import (
    VEHICLE,
    WORK,
    DrivenVehicle,
    calibrated_database,
    driven_database,
    on_a_copy,
)

pytestmark = pytest.mark.benchmark

RUNS = 60


@pytest.fixture(scope="module")
def calibrated_file(migrated_file: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    driven_file = driven_database(migrated_file, tmp_path_factory.mktemp("driven"))
    return calibrated_database(driven_file, tmp_path_factory.mktemp("calibrated"))


def _as_usual(legs: list[Leg]) -> list[Leg]:
    return legs


def _on_and_on(legs: list[Leg]) -> list[Leg]:
    """There and back and there again, eleven times the way."""
    back = [(-advance, -turn) for advance, turn in reversed(legs)]
    return (legs + back) * 5 + legs


def _far(legs: list[Leg]) -> list[Leg]:
    """The same course in a yard ten times as large."""
    return [(10 * advance, turn) for advance, turn in legs]


def _worked(file: Path, folder: Path, course: Callable[[list[Leg]], list[Leg]]) -> DrivenVehicle:
    """A calibrated vehicle after sixty runs."""
    vehicle = on_a_copy(file, folder, StandingClock())
    for number in range(RUNS):
        vehicle.clock.move(hours=6)
        vehicle.hand_in(course(WORK[number % len(WORK)]), started_at=vehicle.clock() - timedelta(hours=3))
    vehicle.clock.move(hours=1)
    return vehicle


def _spent_s(vehicle: DrivenVehicle) -> float:
    begun = process_time()
    evaluated = evaluate_vehicle(vehicle.services, VEHICLE, vehicle.clock(), force=True)
    spent = process_time() - begun
    assert evaluated is not None
    assert evaluated.result.runs_used == RUNS
    return spent


def test_an_evaluation_of_sixty_runs_is_cheap_and_does_not_ask_how_long_they_were(
    calibrated_file: Path, tmp_path: Path, record_property: Callable[[str, object], None]
) -> None:
    """In turns, so that whatever else the machine does falls on all of them; the least of each."""
    courses = {"usual": _as_usual, "on and on": _on_and_on, "far": _far}
    vehicles = {name: _worked(calibrated_file, tmp_path / name, course) for name, course in courses.items()}
    best = dict.fromkeys(vehicles, float("inf"))
    for _ in range(40):
        for name, vehicle in vehicles.items():
            best[name] = min(best[name], _spent_s(vehicle))
    record_property("ms of CPU (at most 30)", round(1e3 * best["usual"], 1))
    for name in ("on and on", "far"):
        record_property(f"ten times longer, {name} (at most 1.1)", round(best[name] / best["usual"], 3))
    assert best["usual"] <= 0.030
    assert best["on and on"] <= 1.1 * best["usual"]
    assert best["far"] <= 1.1 * best["usual"]
