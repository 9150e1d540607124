r"""Non-linear least squares: damped Gauss-Newton steps by QR, with weights that may move between the steps.

A step solves :math:`\min_c \|r - Jc\|` for the whitened residual r and the whitened derivative J of what is predicted.
The columns are scaled to length one and the triangle comes from an orthogonal factorisation: normal equations would
square the condition number and lose half of the digits. A step that does not lower the sum of squares is halved. Where
a parameter acts by its square, steps overshoot and would swing for ever: after a while, no parameter goes back by more
than half of what it went forth.

The covariance of the parameters, for residuals of unit variance, is the product of the inverse triangle with its own
transpose.

References
----------
.. [1] Björck: Numerical Methods for Least Squares Problems. SIAM 1996, chapters 2 and 9.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from registry.numerics.arrays import Float

_HALVINGS = 30
#: Steps after which swings are halved; what converges as it should is done by then.
_SWINGS = 20
#: Rounding of a sum of squares: a relative rise below this is none.
_NO_RISE = 1e-11


class Model(Protocol):
    """What is fitted: residuals and derivatives under weights that the model keeps."""

    def residual(self, at: Float) -> Float:
        """Measured minus predicted (m,), whitened, at parameters (p,)."""

    def jacobian(self, at: Float) -> Float:
        """Derivative (m, p) of the prediction, whitened like the residual."""

    def settle(self, at: Float, solution: Solution, still: bool) -> bool:
        """Bring the weights up to date after a step; whether they stand.

        Parameters
        ----------
        at : (p,) float
            Where the step led.
        solution : Solution
            Of the step.
        still : bool
            Whether the step was negligible.
        """


@dataclass(frozen=True)
class Solution:
    """A linear step.

    Attributes
    ----------
    change : (p,) float
        Of the parameters.
    root : (p, p) float
        The covariance for residuals of unit variance is ``root @ root.T``.
    """

    change: Float
    root: Float

    @property
    def covariance(self) -> Float:
        """Of the parameters (p, p), for residuals of unit variance."""
        return np.asarray(self.root @ self.root.T)

    @property
    def u(self) -> Float:
        """Standard uncertainties (p,) of the parameters, for residuals of unit variance."""
        return np.asarray(np.sqrt(np.einsum("ij,ij->i", self.root, self.root)))


@dataclass(frozen=True)
class Minimum:
    """Where the iteration ended, with the covariance (p, p) there for residuals of unit variance."""

    at: Float
    covariance: Float
    sum_of_squares: float
    converged: bool
    iterations: int


def solve(jacobian: Float, residual: Float) -> Solution:
    """The step that the linearised problem asks for.

    Parameters
    ----------
    jacobian : (m, p) float
        With m at least p.
    residual : (m,) float
        Measured minus predicted.

    Raises
    ------
    numpy.linalg.LinAlgError
        When a column is nothing but zeros, so that its parameter has no effect.
    """
    length = np.sqrt(np.einsum("ij,ij->j", jacobian, jacobian))
    if not np.all(length > 0.0):
        raise np.linalg.LinAlgError("a parameter has no effect on any residual")
    orthogonal, triangle = np.linalg.qr(jacobian / length)
    root = np.linalg.inv(triangle) / length[:, None]
    return Solution(root @ (orthogonal.T @ residual), root)


def gauss_newton(
    model: Model, start: Float, tolerance: float = 1e-9, step_limit: float = np.inf, iterations: int = 100
) -> Minimum:
    """Minimise the sum of squares from a start.

    Parameters
    ----------
    model : Model
        Residuals, derivatives, and weights that may move after every step.
    start : (p,) float
        First parameters.
    tolerance : float
        A step below this share of every standard uncertainty (for residuals of unit variance) is negligible.
    step_limit : float
        Largest change of any parameter in one step.
    iterations : int
        Most steps.
    """
    at = np.array(start, dtype=np.float64)
    residual = model.residual(at)
    solution = solve(model.jacobian(at), residual)
    change = np.zeros_like(at)
    for iteration in range(1, iterations + 1):
        back = (solution.change * change < 0.0) & (iteration > _SWINGS)
        limit = np.where(back, 0.5 * np.abs(change), step_limit)
        at, change = _descend(model, at, residual, np.clip(solution.change, -limit, limit))
        still = bool(np.all(np.abs(change) <= tolerance * solution.u))
        settled = model.settle(at, solution, still)
        residual = model.residual(at)
        solution = solve(model.jacobian(at), residual)
        if still and settled:
            return Minimum(at, solution.covariance, float(residual @ residual), True, iteration)
    return Minimum(at, solution.covariance, float(residual @ residual), False, iterations)


def _descend(model: Model, at: Float, residual: Float, change: Float) -> tuple[Float, Float]:
    """A step that lowers the sum of squares, by halving; where no step does, none."""
    before = float(residual @ residual) * (1.0 + _NO_RISE)
    for _ in range(_HALVINGS):
        trial = model.residual(at + change)
        if float(trial @ trial) <= before:
            return at + change, change
        change = 0.5 * change
    return at, np.zeros_like(change)
