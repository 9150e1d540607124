r"""Rolling noise q and run-to-run spread from the restricted likelihood, one Fisher-scoring step at a time.

For a part P of the covariance V, with the generalised least-squares residual r and the covariance C of the parameters,
the restricted score is

.. math:: \tfrac12(r^TV^{-1}PV^{-1}r - \mathrm{tr}\,V^{-1}P + \mathrm{tr}\,CJ^TV^{-1}PV^{-1}J)

and the information of two parts :math:`\tfrac12\mathrm{tr}\,V^{-1}PV^{-1}Q`, each a sum over runs.

References
----------
.. [1] Patterson, Thompson: Recovery of inter-block information when block sizes are unequal. Biometrika 58 (1971)
   545-554.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from registry.numerics.arrays import Float
from registry.numerics.linearised import Linearised, normal_score

#: How loosely the rolling noise is held at what is expected, in the logarithm of the variance.
ROLLING_PRIOR_SD = 1.5
#: Normal score of a run's distance beyond which it is no evidence on noise.
_OUTLIER_SCORE = 3.5
#: Whether the data ask for spread: one-sided 5 % point of the score test, and never from a handful of runs.
_SPREAD_SCORE = 1.645
_SPREAD_MIN_RUNS = 8
_FIRST_SPREAD = 1e-8


@dataclass(frozen=True)
class Whitened:
    """What a scoring step needs of n runs: their linearisation, whiteners (n, 4, 4), weights (n,), and a root (3, p) of
    the covariance of the quantities.
    """

    runs: Linearised
    whitener: Float
    weight: Float
    root: Float


@dataclass
class VarianceParts:
    """Where the scoring stands.

    Attributes
    ----------
    guess : float
        Rolling noise expected before the data, square metres per metre.
    rolling : float
        Rolling noise now.
    spread : float
        Squared run-to-run spread of the tick factor; zero until the data have asked for it.
    """

    guess: float
    rolling: float
    spread: float = 0.0
    _last: Float = field(default_factory=lambda: np.zeros(2))

    def step(self, at: Whitened) -> float:
        """One scoring step on ln q (held loosely at its guess) and, where in use, on ln of the spread; answers how far
        it moved.
        """
        parts = (at.runs.noise,) if self.spread == 0.0 else (at.runs.noise, at.runs.spread)
        values = np.array([self.rolling, self.spread][: len(parts)])
        score, fisher = _scores(at, parts)
        gradient, curvature = score * values, fisher * np.outer(values, values)
        gradient[0] -= np.log(self.rolling / self.guess) / ROLLING_PRIOR_SD**2
        curvature[0, 0] += 1.0 / ROLLING_PRIOR_SD**2
        if len(parts) == 2:
            curvature[1, 1] += 1e-3
        step = np.clip(np.linalg.solve(curvature, gradient), -1.0, 1.0)
        # A step that takes the last one back has gone too far: halving ends a swing between two values.
        last = self._last[: len(parts)]
        step = np.where(step * last < 0.0, np.clip(step, -0.5 * np.abs(last), 0.5 * np.abs(last)), step)
        self._last[: len(parts)] = step
        self.rolling = float(self.rolling * np.exp(step[0]))
        if len(parts) == 2:
            self.spread = float(self.spread * np.exp(step[1]))
        return float(np.abs(step).max())

    def take_up_spread(self, at: Whitened) -> bool:
        """Whether the data ask for spread that is not in use yet; from then on it is. A score test, with the rolling
        noise as nuisance.
        """
        if self.spread > 0.0 or at.runs.count.size < _SPREAD_MIN_RUNS:
            return False
        score, fisher = _scores(at, (at.runs.noise, at.runs.spread))
        remaining = fisher[1, 1] - fisher[0, 1] ** 2 / max(fisher[0, 0], 1e-300)
        if not (remaining > 0.0 and score[1] / np.sqrt(remaining) > _SPREAD_SCORE):
            return False
        self.spread = _FIRST_SPREAD
        return True


def _scores(at: Whitened, parts: tuple[Float, ...]) -> tuple[Float, Float]:
    """Restricted score and Fisher information of the variance parts, from the runs that fit."""
    residual = np.einsum("nij,nj->ni", at.whitener, at.runs.e)
    fits = normal_score(np.einsum("ni,ni->n", residual, residual), at.runs.count) < _OUTLIER_SCORE
    uncertain = at.whitener @ at.runs.j @ at.root
    white = [at.whitener @ part @ at.whitener.transpose(0, 2, 1) for part in parts]
    score = np.empty(len(parts))
    for index, part in enumerate(white):
        quadratic = np.einsum("ni,ni->n", residual, np.einsum("nij,nj->ni", part, residual))
        correction = np.einsum("nip,nip->n", uncertain, part @ uncertain)
        per_run = at.weight * (quadratic + correction) - np.einsum("nii->n", part)
        score[index] = 0.5 * float(per_run @ fits)
    fisher = np.array([[0.5 * float(np.einsum("nij,nij->n", x, y) @ fits) for y in white] for x in white])
    return score, fisher
