"""Closures and misclosures of many runs at once.

A closure is any subset of four measured components, in this order: x, y, heading, straight distance. Absent components
are carried as masked rows (zero residual, zero Jacobian, unit variance), so that all runs share one array shape and an
absent component adds nothing to any likelihood or information.

Headings are compared modulo a full turn unless the whole turns were counted.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from registry.numerics.arrays import Bool, Float

HEADING = 2
DISTANCE = 3
#: A predicted distance below this has no direction; its gradient is taken as zero instead of dividing by nothing.
_NO_DISTANCE_M = 1e-9


@dataclass(frozen=True)
class Closures:
    """Measured ends of n runs.

    Attributes
    ----------
    measured : (n, 4) float
        x, y in metres, total heading in radians, distance in metres; any number where not measured.
    present : (n, 4) bool
        Which components were measured.
    variance : (n, 4) float
        Squared standard uncertainties of the components.
    turns_counted : (n,) bool
        Whether the heading is a total turn, to be compared without taking full turns off.
    """

    measured: Float
    present: Bool
    variance: Float
    turns_counted: Bool

    def __len__(self) -> int:
        return int(self.measured.shape[0])

    @cached_property
    def own_covariance(self) -> Float:
        """Covariances (n, 4, 4) of the closures by themselves: unit on absent components."""
        return np.asarray(np.where(self.present, self.variance, 1.0)[:, :, None] * np.eye(4))

    @cached_property
    def count(self) -> Float:
        """Measured components (n,) of every run."""
        return np.asarray(self.present.sum(axis=1), dtype=np.float64)

    def take(self, which: Bool) -> Closures:
        """The closures of some of the runs."""
        return Closures(self.measured[which], self.present[which], self.variance[which], self.turns_counted[which])


def wrap(angle_rad: Float) -> Float:
    """The angle modulo a full turn, in [-pi, pi)."""
    return np.asarray((angle_rad + np.pi) % (2.0 * np.pi) - np.pi)


def component_jacobian(poses: Float) -> Float:
    """Derivative (n, 4, 3) of the four components with respect to the pose (n, 3)."""
    result = np.zeros((poses.shape[0], 4, 3))
    result[:, 0, 0] = result[:, 1, 1] = result[:, 2, 2] = 1.0
    distance = np.hypot(poses[:, 0], poses[:, 1])
    known = distance > _NO_DISTANCE_M
    result[known, DISTANCE, 0] = poses[known, 0] / distance[known]
    result[known, DISTANCE, 1] = poses[known, 1] / distance[known]
    return result


def misclosure(closures: Closures, poses: Float) -> Float:
    """Closure minus prediction (n, 4), zero where a component was not measured.

    Parameters
    ----------
    closures : Closures
        Of n runs.
    poses : (n, 3) float
        Predicted end poses of the reference point, headings not wrapped.
    """
    predicted = np.concatenate([poses, np.hypot(poses[:, 0], poses[:, 1])[:, None]], axis=1)
    difference = closures.measured - predicted
    difference[:, HEADING] = np.where(closures.turns_counted, difference[:, HEADING], wrap(difference[:, HEADING]))
    return np.where(closures.present, difference, 0.0)


def misclosure_covariance(closures: Closures, pose_covariance: Float, component: Float) -> Float:
    """Covariance (n, 4, 4) of misclosures: the closure's own plus that of the predicted pose; unit on absent
    components.

    Parameters
    ----------
    closures : Closures
        Of n runs.
    pose_covariance : (n, 3, 3) float
        Covariance of the predicted end pose (rolling noise, spread).
    component : (n, 4, 3) float
        From :func:`component_jacobian`.
    """
    rows = component * closures.present[:, :, None]
    covariance = np.asarray(rows @ pose_covariance @ rows.transpose(0, 2, 1))
    diagonal = np.where(closures.present, closures.variance, 1.0)
    index = np.arange(4)
    covariance[:, index, index] += diagonal
    return covariance
