"""Many runs predicted together, from their maps or from their counts, with the same answer.

A stack gives end poses of the reference points, their derivatives and the covariance from rolling noise for all its
runs at one parameter set. From maps the cost depends on the number of runs alone; from counts there is no box to leave.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple, Protocol

import numpy as np

from registry.numerics.arrays import Bool, Float
from registry.numerics.closure_map import ClosureMap
from registry.numerics.kinematics import end_pose, lever_jacobian
from registry.numerics.rolling_noise import noise_covariance


class Prediction(NamedTuple):
    """End poses (n, 3), Jacobians (n, 3, 3) for (k_L, k_R, W), and noise covariances (n, 3, 3) for q = 1 m."""

    pose: Float
    jacobian: Float
    noise: Float


class Stack(Protocol):
    """Runs that can be predicted together: closure maps, or counts."""

    def predict(self, parameters: Float) -> Prediction:
        """End poses, Jacobians and noise covariances at parameters (3,)."""

    def inside(self, parameters: Float) -> Bool:
        """For each run, whether the prediction is good there."""


class MapStack:
    """The maps of many runs, padded to one shape, evaluated together. Cost depends on the number of runs alone."""

    def __init__(self, maps: Sequence[ClosureMap], levers_m: Float) -> None:
        count = len(maps)
        rows = max((item.coefficients.shape[0] for item in maps), default=1)
        columns = max((item.coefficients.shape[1] for item in maps), default=1)
        self.coefficients = np.zeros((count, rows, columns), dtype=np.complex128)
        for index, item in enumerate(maps):
            self.coefficients[index, : item.coefficients.shape[0], : item.coefficients.shape[1]] = item.coefficients
        self.centre = np.array([item.centre for item in maps]).reshape(count, 3)
        self.half_width = np.array([item.half_width for item in maps]).reshape(count, 2)
        self.totals = np.array([item.totals for item in maps]).reshape(count, 2)
        self.noise = np.array([item.noise for item in maps]).reshape(count, 3, 3)
        self.levers_m = np.asarray(levers_m, dtype=np.float64).reshape(count, 2)

    def _place(self, parameters: Float) -> Float:
        """Position (n, 2) in each run's box, in half widths: inside is [-1, 1]."""
        ratio = parameters[:2] / parameters[2] / (self.centre[:, :2] / self.centre[:, 2:]) - 1.0
        common, difference = 0.5 * (ratio[:, 0] + ratio[:, 1]), 0.5 * (ratio[:, 1] - ratio[:, 0])
        return np.asarray(np.stack([common, difference], axis=1) / self.half_width)

    def inside(self, parameters: Float) -> Bool:
        """For each run, whether the parameters (3,) are in its box."""
        return np.asarray(np.all(np.abs(self._place(parameters)) <= 1.0 + 1e-9, axis=1))

    def predict(self, parameters: Float) -> Prediction:
        """End poses of the reference points at one parameter set (3,), for all runs."""
        place = self._place(parameters)
        rows, columns = self.coefficients.shape[1:]
        value, slope = _chebyshev(place.T, max(rows, columns))
        slope = slope / self.half_width.T
        # Value and slope in one batched product each way: (n, 2, m) @ (n, m, k) @ (n, k, 2).
        left = np.stack([value[:rows, 0], slope[:rows, 0]]).transpose(2, 0, 1)
        right = np.stack([value[:columns, 1], slope[:columns, 1]]).transpose(2, 1, 0)
        corners = left @ (self.coefficients @ right)
        g, g_common, g_difference = corners[:, 0, 0], corners[:, 1, 0], corners[:, 0, 1]
        centre_ab = self.centre[:, :2] / self.centre[:, 2:]
        g_a = 0.5 * (g_common - g_difference) / centre_ab[:, 0]
        g_b = 0.5 * (g_common + g_difference) / centre_ab[:, 1]
        a, b, width = parameters[0] / parameters[2], parameters[1] / parameters[2], parameters[2]
        heading = b * self.totals[:, 1] - a * self.totals[:, 0]
        pose = np.stack([width * g.real, width * g.imag, heading], axis=1)
        by_width = g - a * g_a - b * g_b
        jacobian = np.empty((pose.shape[0], 3, 3))
        for column, part in enumerate((g_a, g_b, by_width)):
            jacobian[:, 0, column], jacobian[:, 1, column] = part.real, part.imag
        jacobian[:, 2, 0] = -self.totals[:, 0] / width
        jacobian[:, 2, 1] = self.totals[:, 1] / width
        jacobian[:, 2, 2] = -heading / width
        return at_levers(Prediction(pose, jacobian, self.noise), self.levers_m)


class CountsStack:
    """The same prediction by integrating the counts: the reference for the maps, and the way outside their boxes."""

    def __init__(self, counts: Sequence[tuple[Float, Float]], levers_m: Float) -> None:
        self.counts = list(counts)
        self.levers_m = np.asarray(levers_m, dtype=np.float64).reshape(len(self.counts), 2)

    def inside(self, parameters: Float) -> Bool:
        """Always: integration has no box."""
        return np.ones(len(self.counts), dtype=np.bool_)

    def poses(self, parameters: Float) -> Float:
        """End poses (n, 3) of the reference points alone, without derivatives or noise."""
        ends = [end_pose(left, right, parameters).pose for left, right in self.counts]
        nothing = np.zeros((len(ends), 3, 3))
        return at_levers(Prediction(np.array(ends).reshape(-1, 3), nothing, nothing), self.levers_m).pose

    def predict(self, parameters: Float) -> Prediction:
        """End poses of the reference points at one parameter set (3,), for all runs."""
        ends = [end_pose(left, right, parameters) for left, right in self.counts]
        noise = np.array([noise_covariance(left, right, parameters) for left, right in self.counts]).reshape(-1, 3, 3)
        pose = np.array([end.pose for end in ends]).reshape(-1, 3)
        jacobian = np.array([end.jacobian for end in ends]).reshape(-1, 3, 3)
        return at_levers(Prediction(pose, jacobian, noise), self.levers_m)


def at_levers(prediction: Prediction, levers_m: Float) -> Prediction:
    """Move predictions from the axle's middle to reference points (n, 2) ahead and left of it."""
    if not levers_m.any():
        return prediction
    pose = prediction.pose.copy()
    cosine, sine = np.cos(pose[:, 2]), np.sin(pose[:, 2])
    pose[:, 0] += levers_m[:, 0] * (cosine - 1.0) - levers_m[:, 1] * sine
    pose[:, 1] += levers_m[:, 0] * sine + levers_m[:, 1] * (cosine - 1.0)
    move = lever_jacobian(prediction.pose[:, 2], levers_m)
    return Prediction(pose, move @ prediction.jacobian, move @ prediction.noise @ move.transpose(0, 2, 1))


def _chebyshev(x: Float, order: int) -> tuple[Float, Float]:
    """Chebyshev polynomials and their derivatives (order, ...) at x (...), valid a little outside [-1, 1] too.

    One recurrence for those of the second kind gives both: :math:`T_k' = kU_{k-1}` and :math:`2T_k = U_k - U_{k-2}`.
    """
    second = np.ones((max(order, 2), *x.shape))
    double = 2.0 * x
    second[1] = double
    for degree in range(2, order):
        np.multiply(double, second[degree - 1], out=second[degree])
        second[degree] -= second[degree - 2]
    value = np.ones((order, *x.shape))
    value[1:2] = x
    value[2:] = 0.5 * (second[2:order] - second[: max(order - 2, 0)])
    slope = np.zeros((order, *x.shape))
    slope[1:] = np.arange(1, order).reshape(-1, *[1] * x.ndim) * second[: order - 1]
    return value, slope
