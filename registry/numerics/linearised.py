"""Runs linearised at one parameter set, whitened by the covariance of their misclosures, weighed by how well they fit.

Whitened rows are (n, 4): four components a run, zero where a component was not measured, of unit variance when the
covariance is right.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from registry.numerics.arrays import Float
from registry.numerics.closure import Closures, component_jacobian, misclosure
from registry.numerics.observability import relative_from_quantities, to_parameters
from registry.numerics.stacks import Stack

#: Run-to-run spread of (tick factor, side ratio, width), in proportion to the usual tolerances.
SPREAD_SHAPE = np.diag([1.0, 0.09, 9.0])
#: Normal score of a run's distance beyond which its influence is bounded.
_BOUND_SCORE = 2.0


@dataclass(frozen=True)
class Linearised:
    """Runs at one point.

    Attributes
    ----------
    e : (n, 4) float
        Misclosures.
    j : (n, 4, 3) float
        Derivatives of the prediction with respect to (ln tick factor, side ratio, ln width).
    noise : (n, 4, 4) float
        Covariance from rolling noise of one square metre per metre.
    own : (n, 4, 4) float
        Covariance of the closures themselves; unit on absent components.
    count : (n,) float
        Measured components.
    """

    e: Float
    j: Float
    noise: Float
    own: Float
    count: Float

    @cached_property
    def spread(self) -> Float:
        """Covariance (n, 4, 4) from a run-to-run spread of one in the tick factor, the others in their proportion."""
        return np.asarray(self.j @ SPREAD_SHAPE @ self.j.transpose(0, 2, 1))

    def whitener(self, rolling: float, spread: float) -> Float:
        """Matrices (n, 4, 4) that turn misclosures into uncorrelated ones of unit variance."""
        covariance = self.own + rolling * self.noise
        if spread > 0.0:
            covariance = covariance + spread * self.spread
        return whitener(covariance)


def whitener(covariance: Float) -> Float:
    """The inverse Cholesky factors of covariances (n, 4, 4)."""
    return np.asarray(np.linalg.inv(np.linalg.cholesky(covariance)))


def linearise(stack: Stack, closures: Closures, quantities: Float) -> Linearised:
    """The runs at quantities (3,)."""
    parameters = to_parameters(quantities)
    prediction = stack.predict(parameters)
    rows = component_jacobian(prediction.pose) * closures.present[:, :, None]
    to_relative = relative_from_quantities(float(quantities[1]))
    return Linearised(
        e=misclosure(closures, prediction.pose),
        j=rows @ (prediction.jacobian @ (parameters[:, None] * to_relative)),
        noise=np.asarray(rows @ prediction.noise @ rows.transpose(0, 2, 1)),
        own=closures.own_covariance,
        count=closures.count,
    )


def normal_score(squared_distance: Float, count: Float) -> Float:
    """Wilson-Hilferty score of a squared distance with ``count`` components: standard normal for a good run."""
    variance = 2.0 / (9.0 * count)
    return np.asarray((np.cbrt(squared_distance / count) - (1.0 - variance)) / np.sqrt(variance))


def robust_weight(squared_distance: Float, count: Float, bounded: bool) -> Float:
    """One within the bound; outside it, falling with the distance (bounded influence), later with its square
    (redescending).
    """
    variance = 2.0 / (9.0 * count)
    bound = count * (1.0 - variance + _BOUND_SCORE * np.sqrt(variance)) ** 3
    ratio = np.minimum(1.0, bound / np.maximum(squared_distance, 1e-300))
    return np.sqrt(ratio) if bounded else ratio
