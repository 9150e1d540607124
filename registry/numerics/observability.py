r"""The three watched quantities, and what a set of runs can tell about them.

Watched are the *tick factor* (mean of left and right), the *side ratio* (right over left, minus one) and the *effective
width*. A fit moves in :math:`\psi = (\ln\text{tick factor},\ \text{side ratio},\ \ln\text{width})`; with side ratio
:math:`\rho`, :math:`k_L = 2k/(2+\rho)` and :math:`k_R = 2k(1+\rho)/(2+\rho)`.

Whether runs determine a quantity follows from their information matrix alone: closed loops leave all three free to
scale together, a straight says nothing on the width. A quantity counts as observed when its data-only standard
uncertainty is at most a third of its tolerance.
"""

from __future__ import annotations

import numpy as np

from registry.numerics.arrays import Bool, Float

#: A quantity is observed when its standard uncertainty is at most this share of its tolerance.
OBSERVED_SHARE = 1.0 / 3.0


def to_quantities(parameters: Float) -> Float:
    """(k_L, k_R, W) to (ln tick factor, side ratio, ln width)."""
    k_left, k_right, width = parameters
    return np.array([np.log(0.5 * (k_left + k_right)), k_right / k_left - 1.0, np.log(width)])


def to_parameters(quantities: Float) -> Float:
    """(ln tick factor, side ratio, ln width) to (k_L, k_R, W)."""
    tick_factor, ratio = float(np.exp(quantities[0])), float(quantities[1])
    return np.array(
        [2.0 * tick_factor / (2.0 + ratio), 2.0 * tick_factor * (1.0 + ratio) / (2.0 + ratio), np.exp(quantities[2])]
    )


def relative_from_quantities(side_ratio: float) -> Float:
    """Derivative (3, 3) of (ln k_L, ln k_R, ln W) with respect to the quantities."""
    per_left = -1.0 / (2.0 + side_ratio)
    per_right = 1.0 / ((1.0 + side_ratio) * (2.0 + side_ratio))
    return np.array([[1.0, per_left, 0.0], [1.0, per_right, 0.0], [0.0, 0.0, 1.0]])


def quantity_covariance(covariance_relative: Float, parameters: Float) -> Float:
    """Covariance (3, 3) of the quantities from that of (ln k_L, ln k_R, ln W)."""
    forward = np.linalg.inv(relative_from_quantities(float(parameters[1] / parameters[0]) - 1.0))
    return np.asarray(forward @ covariance_relative @ forward.T)


def observed(standard_uncertainty: Float, tolerance: Float) -> Bool:
    """Which quantities (3,) the data determine well enough to be shown and judged."""
    return np.asarray(standard_uncertainty <= OBSERVED_SHARE * tolerance)


def deviation(parameters: Float, reference: Float) -> Float:
    """Relative deviation (3,) of the quantities from a reference set: tick factor and width relative, side ratio as a
    difference.
    """
    difference = to_quantities(parameters) - to_quantities(reference)
    return np.array([np.expm1(difference[0]), difference[1], np.expm1(difference[2])])
