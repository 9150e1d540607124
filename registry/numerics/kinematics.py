r"""Exact-arc motion of a differentially steered vehicle, from tick increments to end pose, Jacobian and path.

In one sample interval the sides roll :math:`l = k_L n_L` and :math:`r = k_R n_R`. The turn is
:math:`\alpha = (r - l)/W`, the advance of the midpoint :math:`d = (l + r)/2`, and the displacement
:math:`d\,\mathrm{sinc}(\alpha/2)` along the heading in the middle of the interval. With :math:`a = k_L/W`,
:math:`b = k_R/W` and the cumulative counts :math:`L_i, R_i` the heading after sample i is :math:`bR_i - aL_i`, so that
a whole run is two cumulative sums and one sine and cosine pass. The end position is :math:`W\,G(a, b)`; hence
:math:`\partial P/\partial k_L = G_a`, :math:`\partial P/\partial k_R = G_b` and
:math:`\partial P/\partial W = G - aG_a - bG_b`.

Parameters are arrays ``(k_L, k_R, W)``: metres per tick, metres per tick, metres. Poses are ``(x, y, heading)`` in
metres and radians; x ahead, y to the left, headings counter-clockwise positive and not wrapped.

References
----------
.. [1] Borenstein, Feng: Measurement and correction of systematic odometry errors in mobile robots. IEEE Transactions on
   Robotics and Automation 12 (1996) 869-880.
.. [2] Kelly: Linearized error propagation in odometry. International Journal of Robotics Research 23 (2004) 179-218.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from registry.numerics.arrays import Float

#: Below this half turn per sample the Taylor series of sinc and of its slope are exact to double precision.
_SERIES_LIMIT_RAD = 0.2
#: Samples worked on together: few enough to stay in the processor's cache, and for the linear algebra to stay on one
#: thread.
_BLOCK = 2048


class EndPose(NamedTuple):
    """End pose (3,) and its Jacobian (3, 3) with respect to (k_L, k_R, W)."""

    pose: Float
    jacobian: Float


def sinc_and_slope(half_turn_rad: Float) -> tuple[Float, Float]:
    """sin(h)/h and its derivative for an array of half turns, without a special case at zero.

    Why this form: sinc is entire, so near zero its series is the function, not an approximation that needs a branch per
    sample; a log whose samples are all short (the usual case) takes one polynomial and no division.
    """
    h = half_turn_rad
    if h.size == 0 or max(-float(h.min()), float(h.max())) <= _SERIES_LIMIT_RAD:
        return _series(h)
    small = np.abs(h) <= _SERIES_LIMIT_RAD
    safe = np.where(small, 1.0, h)
    value = np.sin(safe) / safe
    slope = (np.cos(safe) - value) / safe
    series_value, series_slope = _series(np.where(small, h, 0.0))
    return np.where(small, series_value, value), np.where(small, series_slope, slope)


def _series(h: Float) -> tuple[Float, Float]:
    h2 = h * h
    value = 1.0 + h2 * (-1 / 6 + h2 * (1 / 120 + h2 * (-1 / 5040 + h2 * (1 / 362880))))
    slope = h * (-1 / 3 + h2 * (1 / 30 + h2 * (-1 / 840 + h2 * (1 / 45360 - h2 / 3991680))))
    return value, slope


def end_pose(left_ticks: Float, right_ticks: Float, parameters: Float) -> EndPose:
    """End pose of a run and its analytic Jacobian.

    Parameters
    ----------
    left_ticks, right_ticks : (n,) float
        Signed increments per sample.
    parameters : (3,) float
        Metres per tick left and right, effective width in metres.

    Returns
    -------
    EndPose
        Of the axle's middle, in the frame of the start pose.
    """
    k_left, k_right, width = (float(value) for value in parameters)
    a, b = k_left / width, k_right / width
    left_total = right_total = 0.0
    sums = np.zeros((5, 2))
    for begin in range(0, left_ticks.size, _BLOCK):
        left, right = left_ticks[begin : begin + _BLOCK], right_ticks[begin : begin + _BLOCK]
        left_after, right_after = left_total + np.cumsum(left), right_total + np.cumsum(right)
        sums += _block_sums(a, b, 0.5 * left, 0.5 * right, left_after, right_after)
        left_total, right_total = float(left_after[-1]), float(right_after[-1])
    g = sums[0]
    # The heading moves by -L with a and by R with b: a quarter turn from the way itself.
    g_a = sums[1] + [sums[3, 1], -sums[3, 0]]
    g_b = sums[2] + [-sums[4, 1], sums[4, 0]]
    turn = b * right_total - a * left_total
    pose = np.array([width * g[0], width * g[1], turn])
    jacobian = np.empty((3, 3))
    jacobian[:2, 0], jacobian[:2, 1], jacobian[:2, 2] = g_a, g_b, g - a * g_a - b * g_b
    jacobian[2] = (-left_total / width, right_total / width, -turn / width)
    return EndPose(pose, jacobian)


def _block_sums(
    a: float, b: float, left_half: Float, right_half: Float, left_after: Float, right_after: Float
) -> Float:
    """Sums (5, 2) over cosine and sine of the headings in the middle of the samples: the way, its slopes by a and b at
    fixed heading, and the way weighted with the counts left and right in the middle of the samples.
    """
    left_mid, right_mid = left_after - left_half, right_after - right_half
    heading = b * right_mid - a * left_mid
    left, right = a * left_half, b * right_half
    shrink, slope = sinc_and_slope(right - left)
    advance = left + right
    slope *= advance
    rows = np.empty((5, heading.size))
    step = np.multiply(advance, shrink, out=rows[0])
    np.multiply(left_half, shrink - slope, out=rows[1])
    np.multiply(right_half, shrink + slope, out=rows[2])
    np.multiply(left_mid, step, out=rows[3])
    np.multiply(right_mid, step, out=rows[4])
    angles = np.empty((2, heading.size))
    np.cos(heading, out=angles[0])
    np.sin(heading, out=angles[1])
    return np.asarray(rows @ angles.T)


def path(left_ticks: Float, right_ticks: Float, parameters: Float) -> Float:
    """Poses (n + 1, 3) at every sample boundary, starting at the origin, of the axle's middle."""
    k_left, k_right, width = (float(value) for value in parameters)
    left, right = k_left * left_ticks, k_right * right_ticks
    turn = (right - left) / width
    after = np.cumsum(turn)
    middle = after - 0.5 * turn
    step = 0.5 * (left + right) * sinc_and_slope(0.5 * turn)[0]
    poses = np.zeros((left_ticks.size + 1, 3))
    poses[1:, 0] = np.cumsum(step * np.cos(middle))
    poses[1:, 1] = np.cumsum(step * np.sin(middle))
    poses[1:, 2] = after
    return poses


def at_reference_point(poses: Float, lever_m: Float) -> Float:
    """Path of a point off the axle's middle, in the frame of its own start.

    Parameters
    ----------
    poses : (..., 3) float
        Poses of the axle's middle, starting at the origin.
    lever_m : (2,) float
        The point, ahead and to the left of the axle's middle.
    """
    ahead, left = float(lever_m[0]), float(lever_m[1])
    moved = np.array(poses, dtype=np.float64)
    cosine, sine = np.cos(poses[..., 2]), np.sin(poses[..., 2])
    moved[..., 0] += ahead * (cosine - 1.0) - left * sine
    moved[..., 1] += ahead * sine + left * (cosine - 1.0)
    return moved


def lever_jacobian(heading_rad: Float, levers_m: Float) -> Float:
    """How the pose of the reference point follows from the pose of the axle's middle: (n, 3, 3) for n headings and
    levers (n, 2).
    """
    heading_rad = np.asarray(heading_rad, dtype=np.float64)
    cosine, sine = np.cos(heading_rad), np.sin(heading_rad)
    result = np.zeros((heading_rad.size, 3, 3))
    result[:, 0, 0] = result[:, 1, 1] = result[:, 2, 2] = 1.0
    result[:, 0, 2] = -levers_m[:, 0] * sine - levers_m[:, 1] * cosine
    result[:, 1, 2] = levers_m[:, 0] * cosine - levers_m[:, 1] * sine
    return result
