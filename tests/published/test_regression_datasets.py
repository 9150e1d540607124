"""The least-squares machinery of the fit against certified regressions.

Source: National Institute of Standards and Technology, Statistical Reference Datasets (StRD), linear and nonlinear
regression: Norris, Longley, Misra1a, Thurber. Data and certified values are in the public domain.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from registry.numerics.least_squares import Minimum, Solution, gauss_newton, solve

Float = NDArray[np.float64]


@dataclass(frozen=True)
class Curve:
    """A curve through points, as the machinery sees it: nothing is weighed, so that nothing moves between the steps."""

    x: Float
    y: Float
    value: Callable[[Float, Float], Float]
    slopes: Callable[[Float, Float], list[Float]]

    def residual(self, at: Float) -> Float:
        return self.y - self.value(at, self.x)

    def jacobian(self, at: Float) -> Float:
        return np.stack([np.broadcast_to(slope, self.x.shape) for slope in self.slopes(at, self.x)], axis=1)

    def settle(self, at: Float, solution: Solution, still: bool) -> bool:
        return True


def _standard_errors(found: Minimum, count: int) -> tuple[Float, float]:
    """Of the parameters, and the residual standard deviation, as regression programs state them."""
    deviation = float(np.sqrt(found.sum_of_squares / (count - found.at.size)))
    return deviation * np.sqrt(np.diag(found.covariance)), deviation


NORRIS = np.array(
    [
        [0.2, 0.1], [337.4, 338.8], [118.2, 118.1], [884.6, 888.0], [10.1, 9.2], [226.5, 228.1], [666.3, 668.5],
        [996.3, 998.5], [448.6, 449.1], [777.0, 778.9], [558.2, 559.2], [0.4, 0.3], [0.6, 0.1], [775.5, 778.1],
        [666.9, 668.8], [338.0, 339.3], [447.5, 448.9], [11.6, 10.8], [556.0, 557.7], [228.1, 228.3], [995.8, 998.0],
        [887.6, 888.8], [120.2, 119.6], [0.3, 0.3], [0.3, 0.6], [556.8, 557.6], [339.1, 339.3], [887.2, 888.0],
        [999.0, 998.5], [779.0, 778.9], [11.1, 10.2], [118.3, 117.6], [229.2, 228.9], [669.1, 668.4], [448.9, 449.2],
        [0.5, 0.2],
    ]
)  # fmt: skip


def _line() -> Curve:
    x, y = NORRIS.T
    return Curve(x, y, lambda b, x: b[0] + b[1] * x, lambda _, x: [np.ones_like(x), x])


def test_norris_a_straight_line() -> None:
    found = gauss_newton(_line(), np.zeros(2))
    errors, deviation = _standard_errors(found, len(NORRIS))
    assert found.converged
    assert found.at == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-11)
    assert errors == pytest.approx([0.232818234301152, 0.429796848199937e-03], rel=1e-10)
    assert deviation == pytest.approx(0.884796396144373, rel=1e-11)
    assert found.sum_of_squares == pytest.approx(26.6173985294224, rel=1e-11)
    # The covariance of the two, as a test of the GNU Scientific Library states it ("computed from octave").
    assert deviation**2 * found.covariance[0, 1] == pytest.approx(-7.74327536339570e-05, rel=1e-10)


LONGLEY = np.array(
    [
        [60323, 83.0, 234289, 2356, 1590, 107608, 1947], [61122, 88.5, 259426, 2325, 1456, 108632, 1948],
        [60171, 88.2, 258054, 3682, 1616, 109773, 1949], [61187, 89.5, 284599, 3351, 1650, 110929, 1950],
        [63221, 96.2, 328975, 2099, 3099, 112075, 1951], [63639, 98.1, 346999, 1932, 3594, 113270, 1952],
        [64989, 99.0, 365385, 1870, 3547, 115094, 1953], [63761, 100.0, 363112, 3578, 3350, 116219, 1954],
        [66019, 101.2, 397469, 2904, 3048, 117388, 1955], [67857, 104.6, 419180, 2822, 2857, 118734, 1956],
        [68169, 108.4, 442769, 2936, 2798, 120445, 1957], [66513, 110.8, 444546, 4681, 2637, 121950, 1958],
        [68655, 112.6, 482704, 3813, 2552, 123366, 1959], [69564, 114.2, 502601, 3931, 2514, 125368, 1960],
        [69331, 115.7, 518173, 4806, 2572, 127852, 1961], [70551, 116.9, 554894, 4007, 2827, 130081, 1962],
    ]
)  # fmt: skip


def test_longley_nearly_dependent_columns_keep_their_digits() -> None:
    """Certified values from memory, confirmed by computation. Normal equations err by 6e-9 of the first here."""
    design = np.column_stack([np.ones(16), LONGLEY[:, 1:]])
    step = solve(design, LONGLEY[:, 0])
    certified = [
        -3482258.63459582, 15.0618722713733, -0.358191792925910e-01, -2.02022980381683, -1.03322686717359,
        -0.511041056535807e-01, 1829.15146461355,
    ]  # fmt: skip
    assert step.change == pytest.approx(certified, rel=1e-10)
    deviation = float(np.sqrt(((LONGLEY[:, 0] - design @ step.change) ** 2).sum() / 9))
    assert deviation == pytest.approx(304.854073561965, rel=1e-10)


MISRA1A = np.array(
    [
        [77.6, 10.07], [114.9, 14.73], [141.1, 17.94], [190.8, 23.93], [239.9, 29.61], [289.0, 35.18], [332.8, 40.02],
        [378.4, 44.82], [434.8, 50.76], [477.3, 55.05], [536.8, 61.01], [593.1, 66.40], [689.1, 75.47], [760.0, 81.78],
    ]
)  # fmt: skip


@pytest.mark.parametrize("start", [(500.0, 0.0001), (250.0, 0.0005)])
def test_misra1a_an_exponential_from_both_starts(start: tuple[float, float]) -> None:
    x, y = MISRA1A.T
    curve = Curve(
        x,
        y,
        lambda b, x: b[0] * -np.expm1(-b[1] * x),
        lambda b, x: [-np.expm1(-b[1] * x), b[0] * x * np.exp(-b[1] * x)],
    )
    found = gauss_newton(curve, np.array(start))
    errors, deviation = _standard_errors(found, len(MISRA1A))
    assert found.converged
    assert found.at == pytest.approx([2.3894212918e02, 5.5015643181e-04], rel=1e-9)
    assert errors == pytest.approx([2.7070075241e00, 7.2668688436e-06], rel=1e-8)
    assert found.sum_of_squares == pytest.approx(1.2455138894e-01, rel=1e-9)
    assert deviation == pytest.approx(1.0187876330e-01, rel=1e-9)


THURBER = np.array(
    [
        [-3.067, 80.574], [-2.981, 84.248], [-2.921, 87.264], [-2.912, 87.195], [-2.840, 89.076], [-2.797, 89.608],
        [-2.702, 89.868], [-2.699, 90.101], [-2.633, 92.405], [-2.481, 95.854], [-2.363, 100.696], [-2.322, 101.060],
        [-1.501, 401.672], [-1.460, 390.724], [-1.274, 567.534], [-1.212, 635.316], [-1.100, 733.054],
        [-1.046, 759.087], [-0.915, 894.206], [-0.714, 990.785], [-0.566, 1090.109], [-0.545, 1080.914],
        [-0.400, 1122.643], [-0.309, 1178.351], [-0.109, 1260.531], [-0.103, 1273.514], [0.010, 1288.339],
        [0.119, 1327.543], [0.377, 1353.863], [0.790, 1414.509], [0.963, 1425.208], [1.006, 1421.384],
        [1.115, 1442.962], [1.572, 1464.350], [1.841, 1468.705], [2.047, 1447.894], [2.200, 1457.628],
    ]
)  # fmt: skip


@pytest.mark.parametrize(
    "start", [(1000.0, 1000.0, 400.0, 40.0, 0.7, 0.3, 0.03), (1300.0, 1500.0, 500.0, 75.0, 1.0, 0.4, 0.05)]
)
def test_thurber_a_ratio_of_cubics_from_both_starts(start: tuple[float, ...]) -> None:
    x, y = THURBER.T

    def value(b: Float, x: Float) -> Float:
        return np.asarray(np.polyval(b[3::-1], x) / np.polyval([*b[:3:-1], 1.0], x))

    def slopes(b: Float, x: Float) -> list[Float]:
        below = np.polyval([*b[:3:-1], 1.0], x)
        return [x**k / below for k in range(4)] + [-value(b, x) * x**k / below for k in range(1, 4)]

    found = gauss_newton(Curve(x, y, value, slopes), np.array(start))
    errors, deviation = _standard_errors(found, len(THURBER))
    assert found.converged
    certified = [
        1.2881396800e03, 1.4910792535e03, 5.8323836877e02, 7.5416644291e01, 9.6629502864e-01, 3.9797285797e-01,
        4.9727297349e-02,
    ]  # fmt: skip
    certified_errors = [
        4.6647963344, 39.571156086, 28.698696102, 5.5675370270, 3.1333340687e-02, 1.4984928198e-02, 6.5842344623e-03,
    ]  # fmt: skip
    assert found.at == pytest.approx(certified, rel=1e-8)
    assert errors == pytest.approx(certified_errors, rel=1e-7)
    assert found.sum_of_squares == pytest.approx(5.6427082397e03, rel=1e-9)
    assert deviation == pytest.approx(1.3714600784e01, rel=1e-9)


def test_misra1a_from_a_start_twenty_times_off_ends_at_the_same_place() -> None:
    x, y = MISRA1A.T
    curve = Curve(
        x,
        y,
        lambda b, x: b[0] * -np.expm1(-b[1] * x),
        lambda b, x: [-np.expm1(-b[1] * x), b[0] * x * np.exp(-b[1] * x)],
    )
    found = gauss_newton(curve, np.array([100.0, 1e-2]))
    assert found.converged
    assert found.at == pytest.approx([2.3894212918e02, 5.5015643181e-04], rel=1e-9)
