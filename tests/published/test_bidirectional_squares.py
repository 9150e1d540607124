"""The published bidirectional square test, recovered by our fit without the method's own linearisation bias.

Source: Borenstein and Feng, Measurement and correction of systematic odometry errors in mobile robots, IEEE
Transactions on Robotics and Automation 12 (1996) 869-880. Published for the paper's vehicle: width 340.00 nominal,
336.17 mm actual, wheel ratio 1.00084, largest systematic error about 317 mm before. Equations 7 to 18 and these figures
were read in a public study note that transcribes them; the x-forms and y-forms of the angles agree with two public
scripts.

Convention of the simulation: start at the origin heading along x, cw means right turns; the vehicle drives so that its
own reckoning with the nominal values closes exactly; the figures are where it truly ends. The truth is simulated here
with closed forms of circular arcs, not with the numerics. The centres below were computed independently in the same
way.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from registry.numerics.closure import Closures
from registry.numerics.closure_map import fold
from registry.numerics.fit import Fit, Hold, fit
from registry.numerics.kinematics import end_pose
from registry.numerics.observability import to_quantities
from registry.numerics.stacks import CountsStack, MapStack

Float = NDArray[np.float64]

SIDE, NOMINAL_WIDTH, TICK = 4.0, 0.340, 1e-4
NOMINAL = np.array([TICK, TICK, NOMINAL_WIDTH])
PUBLISHED_WIDTH, PUBLISHED_RATIO = 0.33617, 1.00084


@dataclass(frozen=True)
class Vehicle:
    """True wheel ratio D_R / D_L and true over nominal width; the mean of the wheels is the nominal one."""

    ratio: float
    width_factor: float

    @property
    def parameters(self) -> Float:
        factors = [2 / (self.ratio + 1), 2 / (1 / self.ratio + 1), self.width_factor]
        return np.asarray(NOMINAL * factors)


def _legs(sense: int) -> list[tuple[float, float]]:
    """Distances that the two sides count with the nominal values, for a square that reckoning closes exactly."""
    corner = sense * NOMINAL_WIDTH * np.pi / 4
    return [(SIDE, SIDE), (-corner, corner)] * 4


def _ticks(sense: int, parts: int = 25) -> tuple[Float, Float]:
    left, right = (np.array(side) / TICK for side in zip(*_legs(sense), strict=True))
    return np.repeat(left / parts, parts), np.repeat(right / parts, parts)


def _true_end(vehicle: Vehicle, sense: int) -> Float:
    """Along each leg the wheels' circles: a chord of the arc's radius, turned with the heading so far."""
    k_left, k_right, width = vehicle.parameters / TICK * [1, 1, TICK]
    place, heading = 0j, 0.0
    for left, right in _legs(sense):
        turn = (k_right * right - k_left * left) / width
        advance = (k_right * right + k_left * left) / 2
        chord = advance * (np.exp(1j * turn) - 1) / (1j * turn) if turn else advance
        place, heading = place + chord * np.exp(1j * heading), heading + turn
    return np.array([place.real, place.imag, heading])


def _within_half_a_turn(angle: float) -> float:
    return float(np.angle(np.exp(1j * angle)))


@dataclass(frozen=True)
class Method:
    """The equations of the paper on the centres of the two senses, angles in degrees."""

    alpha: float
    beta: float

    @property
    def width(self) -> float:
        return 90 / (90 - self.alpha) * NOMINAL_WIDTH

    @property
    def ratio(self) -> float:
        return self.ratio_at(NOMINAL_WIDTH)

    def ratio_at(self, width: float) -> float:
        radius = SIDE / 2 / np.sin(np.radians(self.beta) / 2)
        return float((radius + width / 2) / (radius - width / 2))


def _x_form(cw: Float, ccw: Float) -> Method:
    return Method(*np.degrees([(cw[0] + ccw[0]) / (-4 * SIDE), (cw[0] - ccw[0]) / (-4 * SIDE)]))


def _y_form(cw: Float, ccw: Float) -> Method:
    return Method(*np.degrees([(cw[1] - ccw[1]) / (-4 * SIDE), (cw[1] + ccw[1]) / (-4 * SIDE)]))


def _heading_form(cw: Float, ccw: Float) -> Method:
    cw_left, ccw_left = _within_half_a_turn(cw[2]), _within_half_a_turn(ccw[2])
    return Method(*np.degrees([(cw_left - ccw_left) / 8, (cw_left + ccw_left) / 8]))


PAPER = Vehicle(PUBLISHED_RATIO, PUBLISHED_WIDTH / NOMINAL_WIDTH)


def test_the_published_vehicle_ends_where_independent_arcs_end_by_our_kinematics_too() -> None:
    for sense, centre_mm, left_deg in ((-1, (63.4204, 62.5581), -1.8118), (1, (229.9950, -209.3971), 6.3912)):
        truth = _true_end(PAPER, sense)
        assert truth[:2] * 1000 == pytest.approx(centre_mm, abs=5e-5)
        assert np.degrees(_within_half_a_turn(truth[2])) == pytest.approx(left_deg, abs=5e-5)
        assert end_pose(*_ticks(sense), PAPER.parameters).pose == pytest.approx(truth, abs=1e-12)
        # By its own reckoning the vehicle came home.
        assert np.hypot(*end_pose(*_ticks(sense), NOMINAL).pose[:2]) < 1e-12


def test_the_largest_systematic_error_is_the_published_one_within_two_percent() -> None:
    largest = max(float(np.hypot(*_true_end(PAPER, sense)[:2])) for sense in (-1, 1))
    assert largest * 1000 == pytest.approx(311.04, abs=5e-3)
    # Published: about 317 mm, from measured runs with their scatter.
    assert largest * 1000 == pytest.approx(317.0, rel=0.02)


def test_the_method_fed_with_exact_centres_shows_its_own_linearisation_bias() -> None:
    found = _x_form(_true_end(PAPER, -1), _true_end(PAPER, 1))
    assert found.width * 1000 == pytest.approx(336.076, abs=5e-4)
    assert found.ratio == pytest.approx(1.000885, abs=5e-7)


def test_the_heading_form_of_the_method_has_no_bias_here() -> None:
    found = _heading_form(_true_end(PAPER, -1), _true_end(PAPER, 1))
    assert found.alpha == pytest.approx(-1.025374, abs=5e-7)
    # The equation takes the half leg over the radius as a sine, where it is the angle: 4e-6 of it.
    assert found.beta == pytest.approx(0.572430, abs=3e-6)
    assert found.width == pytest.approx(PUBLISHED_WIDTH, rel=1e-12)
    assert found.ratio_at(found.width) - 1 == pytest.approx(PUBLISHED_RATIO - 1, rel=5e-6)


def _our_fit(
    vehicle: Vehicle, with_heading: bool, scatter_mm: float = 0.0, folded: bool = False, scale_u: float = 0.0
) -> Fit:
    """Five runs each way, read to 5 mm (and 0.2 degrees); the scale is held, as the method keeps the mean diameter."""
    rng = np.random.default_rng(1996)
    order = [-1] * 5 + [1] * 5
    ends = np.array([_true_end(vehicle, sense) for sense in order])
    ends[:, :2] += scatter_mm / 1000 * rng.standard_normal((len(order), 2))
    if with_heading:
        ends[:, 2] = np.angle(np.exp(1j * ends[:, 2]))
    measured = np.concatenate([ends, np.zeros((len(order), 1))], axis=1)
    present = np.tile([True, True, with_heading, False], (len(order), 1))
    variance = np.tile([25e-6, 25e-6, np.radians(0.2) ** 2, 1.0], (len(order), 1))
    closures = Closures(measured, present, variance, np.zeros(len(order), dtype=np.bool_))
    hold = Hold(np.array([True, False, False]), to_quantities(NOMINAL), np.diag([scale_u**2, 0.0, 0.0]))
    counts, levers = [_ticks(sense) for sense in order], np.zeros((len(order), 2))
    stack = MapStack([fold(*ticks, NOMINAL) for ticks in counts], levers) if folded else CountsStack(counts, levers)
    return fit(stack, closures, NOMINAL, hold)


@pytest.mark.parametrize("folded", [False, True], ids=["exact", "folded"])
@pytest.mark.parametrize("with_heading", [False, True], ids=["positions", "poses"])
def test_our_fit_recovers_the_published_vehicle_without_that_bias(with_heading: bool, folded: bool) -> None:
    found = _our_fit(PAPER, with_heading, folded=folded)
    assert found.status == "converged"
    # The ends are exact, so that only the weak hold at the start (1e-10) and the maps' bound (5e-6 m in 16 m) are left.
    # The method's own bias is 3e-4 of the width and 4.5e-5 of the ratio.
    assert found.parameters[2] == pytest.approx(PUBLISHED_WIDTH, rel=1e-8)
    assert found.parameters[1] / found.parameters[0] == pytest.approx(PUBLISHED_RATIO, abs=1e-9)
    assert np.abs(found.residual[:, :2]).max() < 1e-7


@pytest.mark.parametrize(
    ("vehicle", "cw_mm", "ccw_mm"),
    [
        (Vehicle(1.001, 1.0), (-92.364, -96.818), (95.690, -91.288)),
        (Vehicle(1.0, 1.01), (-122.419, -128.269), (-122.419, 128.269)),
        (Vehicle(1.001, 1.01), (-209.946, -230.501), (-31.341, 31.343)),
    ],
    ids=["ratio", "width", "both"],
)
def test_further_simulated_vehicles_end_as_computed_and_are_recovered(
    vehicle: Vehicle, cw_mm: tuple[float, float], ccw_mm: tuple[float, float]
) -> None:
    for sense, centre_mm in ((-1, cw_mm), (1, ccw_mm)):
        assert end_pose(*_ticks(sense), vehicle.parameters).pose[:2] * 1000 == pytest.approx(centre_mm, abs=1e-3)
    found = _our_fit(vehicle, with_heading=False)
    assert found.parameters == pytest.approx(vehicle.parameters, rel=1e-8)


def test_the_method_on_the_further_vehicles_gives_the_computed_angles() -> None:
    ratio_only, width_only = Vehicle(1.001, 1.0), Vehicle(1.0, 1.01)
    assert _x_form(_true_end(ratio_only, -1), _true_end(ratio_only, 1)).ratio == pytest.approx(1.00099953, abs=5e-8)
    cw, ccw = _true_end(width_only, -1), _true_end(width_only, 1)
    assert _x_form(cw, ccw).alpha == pytest.approx(0.876765, abs=5e-6)
    assert _y_form(cw, ccw).alpha == pytest.approx(0.918657, abs=5e-6)
    assert _x_form(cw, ccw).width / NOMINAL_WIDTH == pytest.approx(1.0098377, abs=1e-7)


def test_one_sense_alone_can_hide_most_of_the_error() -> None:
    """The paper's warning on single-direction squares: 311.78 mm one way, 44.3 mm the other, of the same vehicle."""
    vehicle = Vehicle(1.001, 1.01)
    cw, ccw = (float(np.hypot(*_true_end(vehicle, sense)[:2])) * 1000 for sense in (-1, 1))
    assert cw == pytest.approx(311.78, abs=0.01)
    assert ccw == pytest.approx(44.3, abs=0.05)


def test_with_scatter_the_published_vehicle_is_recovered_within_its_stated_uncertainty() -> None:
    found = _our_fit(PAPER, with_heading=False, scatter_mm=5.0)
    off = to_quantities(found.parameters) - to_quantities(PAPER.parameters)
    assert np.all(np.abs(off[1:]) < 3 * found.u_quantities[1:])
    # Ten readings of 5 mm: a tenth of the deviations found, as the paper's factors of 10 to 22 say.
    assert found.u_quantities[2] < 0.1 * abs(PUBLISHED_WIDTH / NOMINAL_WIDTH - 1)
    assert found.u_quantities[1] < 0.1 * (PUBLISHED_RATIO - 1)


def test_the_scale_that_is_held_passes_its_uncertainty_on_as_it_is() -> None:
    """Closed paths leave the scale free: what a tape says of it moves the width with it, and the side ratio not at all.
    The published scale by tape is good to 0.3 to 0.5 %.
    """
    exact, loose = _our_fit(PAPER, with_heading=True), _our_fit(PAPER, with_heading=True, scale_u=0.004)
    assert loose.u_quantities[0] == pytest.approx(0.004)
    assert loose.u_quantities[2] == pytest.approx(np.hypot(0.004, exact.u_quantities[2]), rel=0.02)
    assert loose.u_quantities[1] == pytest.approx(exact.u_quantities[1], rel=0.02)
