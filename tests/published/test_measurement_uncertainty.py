"""Uncertainty, coverage, conformity and agreement against the guides and their worked examples."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import ndtr

from registry.numerics.closure import Closures
from registry.numerics.conformity import coverage_factor, probability_beyond
from registry.numerics.fit import fit
from registry.numerics.least_squares import solve
from registry.numerics.linearised import normal_score
from registry.numerics.stacks import CountsStack

Float = NDArray[np.float64]


def test_the_thermometer_of_the_guide_with_its_covariance() -> None:
    """JCGM 100:2008 (GUM), H.3, table H.6. Printed: y1 -0.1712 (0.0029), y2 0.00218 (0.00067), r -0.930, s 0.0035, and
    at 30 degrees -0.1494 (0.0041) with 9 degrees of freedom. Data and printed results as an open uncertainty library's
    documentation states them; further digits computed independently.
    """
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
    b = np.array([-171, -169, -166, -159, -164, -165, -156, -157, -159, -161, -160]) * 1e-3
    design = np.column_stack([np.ones(11), t - 20.0])
    step = solve(design, b)
    left_over = float(((b - design @ step.change) ** 2).sum())
    deviation = math.sqrt(left_over / 9)
    covariance = deviation**2 * step.covariance
    u = deviation * step.u
    assert step.change == pytest.approx([-0.1712, 0.00218], abs=5e-5)
    assert step.change == pytest.approx([-0.17120379, 0.0021826977], rel=5e-8)
    assert u == pytest.approx([0.00287760, 0.00066793877], rel=2e-6)
    assert covariance[0, 1] / (u[0] * u[1]) == pytest.approx(-0.930429603, abs=1e-8)
    assert left_over == pytest.approx(1.10096583109e-4, rel=1e-9)
    at_30 = np.array([1.0, 10.0])
    assert at_30 @ step.change == pytest.approx(-0.14937681, abs=5e-9)
    assert math.sqrt(at_30 @ covariance @ at_30) == pytest.approx(0.00413860, abs=5e-9)
    # Without the covariance it would be 0.0073: the term is what is tested here.
    assert math.hypot(u[0], 10 * u[1]) == pytest.approx(0.0073, abs=5e-5)


TABLE_G2 = {
    1: (1.84, 6.31, 12.71, 13.97, 63.66), 2: (1.32, 2.92, 4.30, 4.53, 9.92), 3: (1.20, 2.35, 3.18, 3.31, 5.84),
    4: (1.14, 2.13, 2.78, 2.87, 4.60), 5: (1.11, 2.02, 2.57, 2.65, 4.03), 6: (1.09, 1.94, 2.45, 2.52, 3.71),
    7: (1.08, 1.89, 2.36, 2.43, 3.50), 8: (1.07, 1.86, 2.31, 2.37, 3.36), 9: (1.06, 1.83, 2.26, 2.32, 3.25),
    10: (1.05, 1.81, 2.23, 2.28, 3.17), 20: (1.03, 1.72, 2.09, 2.13, 2.85), 50: (1.01, 1.68, 2.01, 2.05, 2.68),
    100: (1.005, 1.660, 1.984, 2.025, 2.626), math.inf: (1.000, 1.645, 1.960, 2.000, 2.576),
}  # fmt: skip


@pytest.mark.parametrize("degrees", TABLE_G2)
def test_coverage_factors_are_those_of_table_g2(degrees: float) -> None:
    """JCGM 100:2008 (GUM), table G.2; six of its rows were read in a manufacturer's reprint, all were computed."""
    probabilities = (0.6827, 0.90, 0.95, 0.9545, 0.99)
    found = [coverage_factor(degrees, probability) for probability in probabilities]
    decimals = 3 if degrees >= 100 else 2
    assert found == pytest.approx(TABLE_G2[degrees], abs=0.51 * 10**-decimals)


@pytest.mark.parametrize(
    ("degrees", "printed"), [(1, 235.80), (2, 19.21), (3, 9.22), (5, 5.51), (10, 3.96), (20, 3.42), (math.inf, 3.000)]
)
def test_coverage_factors_of_nearly_everything(degrees: float, printed: float) -> None:
    """The column of 99.73 % of the same table. The exact first value is 235.784; the guide prints 235.80."""
    assert coverage_factor(degrees, 0.9973) == pytest.approx(printed, abs=0.02 if degrees == 1 else 0.0051)


def test_a_coverage_factor_never_rests_on_less_than_one_degree_of_freedom() -> None:
    assert coverage_factor(0.2) == coverage_factor(1.0) == pytest.approx(12.706, abs=1e-3)


@pytest.mark.parametrize(
    ("value", "u", "lower", "upper", "exact", "printed"),
    [
        (509.7, 8.6, 490.0, math.inf, 0.98901, 0.99),
        (-5.47, 0.05, -math.inf, -5.40, 0.91924, 0.92),
        (13.6, 1.8, 12.5, 16.3, 0.66263, 0.66),
    ],
    ids=["lower limit", "upper limit", "two limits"],
)
def test_conformance_probabilities_of_the_guide(
    value: float, u: float, lower: float, upper: float, exact: float, printed: float
) -> None:
    """JCGM 106:2012, examples of a burst strength, a breakdown voltage and an oil's viscosity: inputs from memory,
    arithmetic computed independently.
    """
    conforming = 1.0 - probability_beyond(value, u, lower, upper)
    assert conforming == pytest.approx(exact, abs=5e-6)
    assert conforming == pytest.approx(printed, abs=5e-3)


def test_guarded_rejection_of_the_guide() -> None:
    """JCGM 106:2012, the speed example (inputs from memory): at 106.59 km/h, read with a relative u of 2 %, the true
    speed is above the limit of 100 with 99.9 %.
    """
    reading = 100 / (1 - 3.09 * 0.02)
    assert reading == pytest.approx(106.59, abs=5e-3)
    assert probability_beyond(reading, 0.02 * reading, -math.inf, 100.0) == pytest.approx(0.999, abs=5e-6)


def test_with_few_degrees_of_freedom_the_same_reading_proves_less() -> None:
    """Student's distribution in place of the normal one (GUM annex G): t of 0.95 at 9 degrees is 1.833 one-sided."""
    assert probability_beyond(1.833, 1.0, -math.inf, 0.0, degrees=9) == pytest.approx(0.95, abs=5e-5)
    assert probability_beyond(1.833, 1.0, -math.inf, 0.0) == pytest.approx(float(ndtr(1.833)), abs=1e-12)


def test_the_birge_ratio_of_three_readings_that_disagree() -> None:
    """Birge, The calculation of errors by the method of least squares, Physical Review 40 (1932) 207-227. Readings 10.1
    (0.1), 9.9 (0.1), 10.4 (0.2), computed: mean 10.04444, u 0.066667, ratio 1.66667, scaled u 0.111111. Here they are
    straight distances of three runs of 10 m by the nominal values.
    """
    ticks = [(np.full(20, 500.0), np.full(20, 500.0))] * 3
    measured = np.zeros((3, 4))
    measured[:, 3] = [10.1, 9.9, 10.4]
    closures = Closures(
        measured,
        np.tile([False, False, False, True], (3, 1)),
        np.column_stack([np.ones((3, 3)), [0.01, 0.01, 0.04]]),
        np.zeros(3, dtype=np.bool_),
    )
    nominal = np.array([1e-3, 1e-3, 0.5])
    # A rolling noise of a micrometre on a metre, so that the readings' own uncertainty is all there is.
    found = fit(CountsStack(ticks, np.zeros((3, 2))), closures, nominal, rolling_guess_m=1e-12)
    mean = 10 * found.parameters[:2].mean() / 1e-3
    assert mean == pytest.approx(10.04444, abs=1e-5)
    assert found.birge_ratio == pytest.approx(1.66667, abs=1e-4)
    # The weak hold at the start, one in relative terms, is 2e-5 of the information.
    assert found.u_quantities[0] * mean == pytest.approx(0.111111, rel=1e-4)
    assert found.weight == pytest.approx([1.0, 1.0, 1.0])


CHI_SQUARE_95 = {1: 3.841, 2: 5.991, 3: 7.815, 4: 9.488, 5: 11.070, 6: 12.592}


@pytest.mark.parametrize("components", CHI_SQUARE_95)
def test_the_normal_score_of_a_distance_reaches_its_95_percent_point(components: int) -> None:
    """Chi-square 95 % points (tables), through the cube root of Wilson and Hilferty, PNAS 17 (1931) 684-688."""
    score = normal_score(np.array(CHI_SQUARE_95[components]), np.array(float(components)))
    # The approximation is good to 0.03 for one component and 0.015 from two.
    assert float(score) == pytest.approx(1.6449, abs=0.03 if components == 1 else 0.015)


def test_bounds_on_the_birge_ratio_follow_from_chi_square() -> None:
    """sqrt(chi-square of 0.95 over its degrees), computed: 3 1.614, 5 1.488, 9 1.371, 19 1.260. By the normal score."""
    for degrees, bound in ((3, 1.614), (5, 1.488), (9, 1.371), (19, 1.260)):
        score = normal_score(np.array(degrees * bound**2), np.array(float(degrees)))
        assert float(score) == pytest.approx(1.6449, abs=0.01)
