"""The least-squares machinery by itself."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from registry.numerics.least_squares import Solution, gauss_newton, solve

from .drives import Float

NUMBERS = st.floats(-100.0, 100.0)


@given(arrays.arrays(np.float64, (7, 3), elements=NUMBERS), arrays.arrays(np.float64, 7, elements=NUMBERS))
def test_a_step_leaves_a_residual_that_no_column_can_lessen(jacobian: Float, residual: Float) -> None:
    jacobian = jacobian + 300.0 * np.eye(7, 3)
    solution = solve(jacobian, residual)
    assert jacobian.T @ (residual - jacobian @ solution.change) == pytest.approx(0.0, abs=1e-6)
    assert solution.covariance == pytest.approx(np.linalg.inv(jacobian.T @ jacobian), rel=1e-8, abs=1e-15)
    assert solution.u == pytest.approx(np.sqrt(np.diag(solution.covariance)))


@given(st.floats(1e-9, 1e9), st.floats(1e-9, 1e9))
def test_the_units_of_the_parameters_do_not_matter(first: float, second: float) -> None:
    jacobian = np.array([[1.0, 0.2], [0.3, 1.0], [1.0, 1.1], [0.5, -0.4]])
    residual = np.array([1.0, 2.0, 3.0, 4.0])
    units = np.array([first, second])
    scaled = solve(jacobian * units, residual)
    assert scaled.change * units == pytest.approx(solve(jacobian, residual).change, rel=1e-12)


def test_a_parameter_without_any_effect_is_refused() -> None:
    with pytest.raises(np.linalg.LinAlgError, match="no effect"):
        solve(np.array([[1.0, 0.0], [2.0, 0.0]]), np.array([1.0, 2.0]))


@dataclass
class Curve:
    """A one-parameter problem, with a note of where it was asked."""

    value: Callable[[float], float]
    slope: Callable[[float], float]
    asked: list[float] = field(default_factory=list)

    def residual(self, at: Float) -> Float:
        self.asked.append(float(at[0]))
        return np.array([-self.value(float(at[0]))])

    def jacobian(self, at: Float) -> Float:
        return np.array([[self.slope(float(at[0]))]])

    def settle(self, at: Float, solution: Solution, still: bool) -> bool:
        return True


def test_steps_that_would_raise_the_sum_of_squares_are_halved() -> None:
    # From 2, undamped Gauss-Newton (here Newton) on the arc tangent runs away to infinity.
    curve = Curve(np.arctan, lambda x: 1 / (1 + x * x))
    found = gauss_newton(curve, np.array([2.0]))
    assert found.converged
    assert found.at == pytest.approx([0.0], abs=1e-12)
    accepted = [2.0]
    for place in curve.asked[1:]:
        if abs(np.arctan(place)) < abs(np.arctan(accepted[-1])):
            accepted.append(place)
    assert accepted[-1] == pytest.approx(0.0, abs=1e-12)


def test_steps_are_no_longer_than_their_limit() -> None:
    curve = Curve(lambda x: x - 10.0, lambda _: 1.0)
    found = gauss_newton(curve, np.array([0.0]), step_limit=0.5, iterations=100)
    assert found.at == pytest.approx([10.0])
    assert np.abs(np.diff(curve.asked)).max() <= 0.5 + 1e-12


def test_an_iteration_that_is_cut_short_says_so() -> None:
    curve = Curve(lambda x: x - 10.0, lambda _: 1.0)
    found = gauss_newton(curve, np.array([0.0]), step_limit=0.5, iterations=5)
    assert not found.converged
    assert found.iterations == 5
    assert found.at == pytest.approx([2.5])


def test_weights_that_still_move_keep_the_iteration_going() -> None:
    @dataclass
    class Reweighed(Curve):
        rounds: int = 0

        def settle(self, at: Float, solution: Solution, still: bool) -> bool:
            self.rounds += 1
            return self.rounds >= 7

    curve = Reweighed(lambda x: x - 1.0, lambda _: 1.0)
    found = gauss_newton(curve, np.array([0.0]))
    assert found.converged
    assert found.iterations == 7
