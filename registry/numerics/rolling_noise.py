r"""Covariance of the end pose from noise in the rolling of each side.

Each side's error variance grows with the distance it rolls, :math:`\sigma^2 = q\,|l|` (Chong and Kleeman 1997). An
error in the left side at a point of the path moves the end by half of it along the heading there and turns the rest of
the path by :math:`-1/W` of it:

.. math:: g_L = \left(\tfrac12\cos\varphi + \tfrac{Y}{W},\ \tfrac12\sin\varphi - \tfrac{X}{W},\ -\tfrac1W\right)

with (X, Y) the way still to go; on the right side the signs of the turned parts change. The covariance for q = 1 is
:math:`N = \int |dl|\,g_L g_L^T + |dr|\,g_R g_R^T`, taken with two Gauss points per sample so that it does not depend
on how the samples are cut (exact on a straight of one sample).

References
----------
.. [1] Chong, Kleeman: Accurate odometry and error modelling for a mobile robot. IEEE ICRA 1997.
"""

from __future__ import annotations

import numpy as np

from registry.numerics.arrays import Float
from registry.numerics.kinematics import path, sinc_and_slope

#: The two Gauss-Legendre points on [0, 1]; each carries half the weight.
GAUSS_POINTS = (0.5 - 0.5 / 3.0**0.5, 0.5 + 0.5 / 3.0**0.5)
#: Samples taken at a time: the memory does not grow with the run.
_CHUNK = 65_536


def noise_covariance(left_ticks: Float, right_ticks: Float, parameters: Float) -> Float:
    """Covariance (3, 3) of the end pose for q = 1 m: multiply by q in square metres per metre.

    Parameters
    ----------
    left_ticks, right_ticks : (n,) float
        Signed increments per sample.
    parameters : (3,) float
        Metres per tick left and right, effective width in metres.
    """
    poses = path(left_ticks, right_ticks, parameters)
    result = np.zeros((3, 3))
    for begin in range(0, left_ticks.size, _CHUNK):
        part = slice(begin, begin + _CHUNK)
        result += _of_part(left_ticks[part], right_ticks[part], parameters, poses[:-1][part], poses[-1])
    return result


def _of_part(left_ticks: Float, right_ticks: Float, parameters: Float, start: Float, end: Float) -> Float:
    """What some samples, with the poses (n, 3) before each, add to the covariance at the end (3,)."""
    k_left, k_right, width = (float(value) for value in parameters)
    left, right = k_left * left_ticks, k_right * right_ticks
    turn = (right - left) / width
    advance = 0.5 * (left + right)
    result = np.zeros((3, 3))
    for point in GAUSS_POINTS:
        step = point * advance * sinc_and_slope(0.5 * point * turn)[0]
        middle = start[:, 2] + 0.5 * point * turn
        heading = start[:, 2] + point * turn
        to_go_x = (end[0] - start[:, 0] - step * np.cos(middle)) / width
        to_go_y = (end[1] - start[:, 1] - step * np.sin(middle)) / width
        half_cosine, half_sine = 0.5 * np.cos(heading), 0.5 * np.sin(heading)
        for rolled, sign in ((left, 1.0), (right, -1.0)):
            g = np.stack(
                [half_cosine + sign * to_go_y, half_sine - sign * to_go_x, np.full(heading.size, -sign / width)]
            )
            # The product of a matrix with its own transpose is symmetric to the last bit.
            g *= np.sqrt(0.5 * np.abs(rolled))
            result += g @ g.T
    return result
