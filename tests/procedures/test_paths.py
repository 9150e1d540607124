"""Where a run went by different parameters."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from registry.domain.vehicle import Parameters, ReferencePoint
from registry.errors import NotFound
from registry.procedures.baseline import propose_entered
from registry.procedures.evaluation import evaluate_vehicle
from registry.procedures.intake import take_run
from registry.procedures.paths import run_paths
from registry.procedures.registration import put_vehicle
from tests.numerics.drives import half_loop, spin, straight
from tests.procedures.drives_on_record import (
    APPROVER,
    STATEMENT,
    TECHNICIAN,
    TRUTH,
    VEHICLE,
    DrivenVehicle,
    Reading,
    sealed,
    statement_of,
)


def true_values() -> Parameters:
    left, right, width = (float(value) for value in TRUTH.parameters)
    return Parameters(left, right, width)


def test_before_anything_is_in_force_a_run_is_drawn_by_the_rulers_values(driven: DrivenVehicle) -> None:
    run = driven.hand_in(straight(10.0))
    drawn = run_paths(driven.services, run.run_id)
    assert drawn.run == run
    (path,) = drawn.paths
    assert (path.label, path.parameters, path.calibration) == ("nominal values", STATEMENT.nominal, None)
    assert path.poses.shape == (run.samples, 3)
    assert path.poses[0] == pytest.approx([0.0, 0.0, 0.0])
    assert path.poses[-1, 0] == pytest.approx(10.0, rel=0.005)


def test_a_run_is_drawn_by_what_was_in_force_then_and_now_and_by_the_newest_fit(calibrated: DrivenVehicle) -> None:
    run = calibrated.hand_in(half_loop(4.0, 1))
    values = replace(true_values(), width_m=0.9)
    made = propose_entered(calibrated.services, TECHNICIAN, VEHICLE, "entered", values, (4e-7, 4e-7, 0.001), None)
    calibrated.clock.move(minutes=1)
    adopted = calibrated.put_in_force(made)
    calibrated.work(6)
    evaluation = evaluate_vehicle(calibrated.services, VEHICLE, calibrated.clock())
    assert evaluation is not None
    assert evaluation.proposed_calibration_id is not None
    paths = run_paths(calibrated.services, run.run_id).paths
    assert [path.label for path in paths] == [
        "in force when driven (number 1)",
        "in force now (number 2)",
        "newest fit (proposed, number 3)",
    ]
    assert [path.calibration.number for path in paths if path.calibration] == [1, 2, 3]
    assert paths[1].parameters == adopted.result.parameters
    assert all(path.poses.shape == paths[0].poses.shape for path in paths)
    # The width that was entered is 4 % too large: half a turn of the loop ends 7 degrees off.
    assert paths[0].misclosure.heading_rad == pytest.approx(0.0, abs=0.02)
    assert paths[1].misclosure.heading_rad == pytest.approx(math.pi * (1 - 0.868 / 0.9), abs=0.02)
    assert paths[2].misclosure.heading_rad == pytest.approx(0.0, abs=0.02)


def test_what_is_in_force_is_drawn_once_while_it_is_the_same(calibrated: DrivenVehicle) -> None:
    run = calibrated.hand_in(half_loop(4.0, -1))
    assert [path.label for path in run_paths(calibrated.services, run.run_id).paths] == [
        "in force when driven (number 1)"
    ]


def test_the_misclosure_of_a_path_is_the_one_on_the_record(calibrated: DrivenVehicle) -> None:
    run = calibrated.hand_in(half_loop(4.0, 1), Reading(wrong_m=0.2))
    (path,) = run_paths(calibrated.services, run.run_id).paths
    assert run.misclosure is not None
    for told, recorded in zip(vars(path.misclosure).values(), vars(run.misclosure).values(), strict=True):
        assert told == pytest.approx(recorded, abs=1e-9)
    # The closing error is the mark minus where the drawn path ends.
    drawn = run_paths(calibrated.services, run.run_id)
    assert drawn.mark_m is not None
    assert drawn.mark_m - path.poses[-1, :2] == pytest.approx([run.misclosure.x_m, run.misclosure.y_m], abs=1e-9)


def test_the_ellipse_of_a_mark_is_wider_than_its_reading_and_positive_definite(calibrated: DrivenVehicle) -> None:
    run = calibrated.hand_in(straight(10.0))
    drawn = run_paths(calibrated.services, run.run_id)
    assert drawn.mark_covariance_m2 is not None
    assert drawn.mark_covariance_m2.shape == (2, 2)
    assert drawn.mark_covariance_m2 == pytest.approx(drawn.mark_covariance_m2.T)
    assert np.all(np.linalg.eigvalsh(drawn.mark_covariance_m2) >= 0.005**2)
    # Rolling noise of (0.7 mm)^2 a metre over 10 m: 18 mm to the side, mostly from the heading, and 1.6 mm ahead.
    ahead, aside = np.sqrt(np.diag(drawn.mark_covariance_m2))
    noise_m = (calibrated_noise(calibrated)) ** 2
    assert ahead == pytest.approx(math.sqrt(0.005**2 + noise_m * 10 / 2), rel=0.02)
    assert aside == pytest.approx(math.sqrt(0.005**2 + 2 * noise_m * 10**3 / (3 * 0.868**2)), rel=0.02)


def calibrated_noise(driven: DrivenVehicle) -> float:
    """The rolling noise of the calibration in force, in metres per square root of a metre."""
    run = driven.hand_in(straight(1.0))
    (path,) = run_paths(driven.services, run.run_id).paths
    assert path.calibration is not None
    assert path.calibration.result.random_error_m_per_sqrt_m is not None
    return path.calibration.result.random_error_m_per_sqrt_m


def test_a_run_whose_place_was_not_read_has_no_mark(calibrated: DrivenVehicle) -> None:
    for reading in (Reading(("heading",)), Reading(("distance",)), Reading(("x",))):
        run = calibrated.hand_in(straight(5.0), reading)
        drawn = run_paths(calibrated.services, run.run_id)
        assert (drawn.mark_m, drawn.mark_covariance_m2) == (None, None)
        measured = [value is not None for value in vars(drawn.paths[0].misclosure).values()]
        assert measured == [name in reading.components for name in ("x", "y", "heading", "distance")]


def test_the_path_is_that_of_the_measured_mark(driven: DrivenVehicle) -> None:
    point = ReferencePoint(ahead_m=0.4, left_m=-0.1)
    put_vehicle(driven.services, APPROVER, "tub-nose", replace(STATEMENT, nominal=true_values(), reference_point=point))
    truth = replace(TRUTH, lever_m=(0.4, -0.1), rolling_noise_m=0.0)
    rng = np.random.default_rng(8)
    for legs in (spin(0.5), half_loop(4.0, 1)):
        statement = statement_of(legs, truth, rng, driven.clock(), f"{legs}", Reading(position_sd_m=1e-4))
        run, _ = take_run(driven.services, TECHNICIAN, "tub-nose", sealed(statement))
        drawn = run_paths(driven.services, run.run_id)
        assert drawn.mark_m is not None
        # A tick is a third of a millimetre; the axle's middle is up to 0.8 m from the mark.
        assert drawn.paths[0].poses[-1, :2] == pytest.approx(drawn.mark_m, abs=0.004)
        assert drawn.paths[0].poses[0, :2] == pytest.approx([0.0, 0.0])
    assert drawn.paths[0].misclosure.x_m == pytest.approx(0.0, abs=0.004)


def test_a_long_run_is_thinned_for_drawing_and_keeps_its_ends(driven: DrivenVehicle) -> None:
    count = 20_001
    ticks = np.arange(count, dtype=np.int64) * 20
    statement = replace(
        driven.state(straight(5.0)),
        time_s=np.arange(count) / 100.0,
        left_counts=ticks,
        right_counts=ticks,
    )
    run, _ = take_run(driven.services, TECHNICIAN, VEHICLE, sealed(statement))
    (path,) = run_paths(driven.services, run.run_id).paths
    assert 1000 <= path.poses.shape[0] <= 1700
    assert path.poses[0] == pytest.approx([0.0, 0.0, 0.0])
    assert path.poses[-1, 0] == pytest.approx(20 * (count - 1) * 3.5e-4)


def test_a_run_that_is_set_aside_can_be_looked_at(driven: DrivenVehicle) -> None:
    statement = driven.state(half_loop(4.0, 1))
    counts = statement.left_counts.copy()
    counts[50:] = (counts[50:] + (1 << 31) - 1) % (1 << 32)
    run, _ = take_run(driven.services, TECHNICIAN, VEHICLE, sealed(replace(statement, left_counts=counts)))
    assert run.use == "set aside"
    (path,) = run_paths(driven.services, run.run_id).paths
    assert np.all(np.isfinite(path.poses))


def test_an_unknown_run_is_not_found(driven: DrivenVehicle) -> None:
    with pytest.raises(NotFound, match="nowhere"):
        run_paths(driven.services, "nowhere")
