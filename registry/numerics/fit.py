r"""Restricted maximum likelihood of tick factors and width from the closures of many runs.

A misclosure has the covariance :math:`V = R + qN + \tau^2 J S J^T`: the closure's own, rolling noise, and the spread
of the
parameters from run to run (load, surface, temperature), shaped like the usual tolerances. The quantities
(ln tick factor, side ratio, ln width) follow from Gauss-Newton steps with the analytic Jacobian; after each step q (and
:math:`\tau^2`, where the data ask for it) moves by one Fisher-scoring step on the restricted likelihood. One run's
influence is bounded: beyond a normalised distance its weight falls with the square of the distance, so that a reading
that is a metre wrong pulls less the wronger it is.

Only misuse raises. What the runs do not determine stays where the start value is, with a standard uncertainty of the
order of one, and is told by the covariance: see :mod:`registry.numerics.observability`.

References
----------
.. [1] Patterson, Thompson: Recovery of inter-block information when block sizes are unequal. Biometrika 58 (1971)
545-554.
.. [2] Chong, Kleeman: Accurate odometry and error modelling for a mobile robot. IEEE ICRA 1997.
.. [3] Wilson, Hilferty: The distribution of chi-square. PNAS 17 (1931) 684-688.
.. [4] Satterthwaite: An approximate distribution of estimates of variance components. Biometrics Bulletin 2 (1946)
110-114.
.. [5] Birge: The calculation of errors by the method of least squares. Physical Review 40 (1932) 207-227.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal, Protocol

import numpy as np
from scipy.special import stdtrit

from registry.numerics.arrays import Bool, Float
from registry.numerics.closure import Closures, component_jacobian, misclosure, misclosure_covariance
from registry.numerics.closure_map import Prediction
from registry.numerics.observability import relative_from_quantities, to_parameters, to_quantities

METHOD_VERSION = "1"

#: Rolling noise before any run has told: half a millimetre per square root of a metre, squared.
DEFAULT_ROLLING_NOISE_M = 2.5e-7
#: How loosely that is held, in the logarithm of the variance.
_ROLLING_PRIOR_SD = 1.5
#: A direction the runs leave free is kept at the start value with these standard deviations; a third of any tolerance
#: is far below.
_WEAK_SD = np.array([1.0, 0.3, 1.0])
#: Run-to-run spread of (tick factor, side ratio, width), in proportion to the usual tolerances.
_SPREAD_SHAPE = np.diag([1.0, 0.09, 9.0])
#: Whether the data ask for spread: one-sided 5 % point of the score test, and never from a handful of runs.
_SPREAD_SCORE = 1.645
_SPREAD_MIN_RUNS = 8
#: Normal score of a run's distance beyond which its influence is bounded, and beyond which it is no evidence on noise.
_BOUND_SCORE = 2.0
_OUTLIER_SCORE = 3.5
_STEP_LIMIT = 0.2
_ITERATIONS = 60
_BOUNDED_FIRST = 5
#: Settled: a step of a two-hundredth of the standard uncertainty, and the noise variance known to 1 %.
_SETTLED_STEP, _SETTLED_NOISE = 5e-3, 1e-2

Status = Literal["converged", "not converged", "outside maps"]


class Stack(Protocol):
    """Runs that can be predicted together: closure maps, or counts."""

    def predict(self, parameters: Float) -> Prediction: ...

    def inside(self, parameters: Float) -> Bool: ...


@dataclass(frozen=True)
class Hold:
    """Quantities taken from elsewhere: which (3,), at what (ln tick factor, side ratio, ln width), and their
    covariance (3, 3).
    """

    which: Bool
    quantities: Float
    covariance: Float


@dataclass(frozen=True)
class Fit:
    """What n runs say.

    Attributes
    ----------
    parameters : (3,) float
        (k_L, k_R, W) in metres.
    covariance : (3, 3) float
        Of (ln tick factor, side ratio, ln width), standard, scaled by the squared Birge ratio where that is above one.
    rolling_noise_m : float
        q in square metres per metre; its square root times 1000 is in mm per square root of a metre.
    spread : float
        Standard deviation of the tick factor from run to run (relative); side ratio 0.3 and width 3 times that.
    coverage_factor : float
        Student's, two-sided 95 %.
    residual : (n, 4) float
        Misclosures by the fitted parameters.
    normalised : (n,) float
        Normal score of each run's distance: above 3.5 the run does not fit the others.
    influence : (n, 3) float
        Relative change of (k_L, k_R, W) if the run were left out, to first order.
    deviance : float
        Minus twice the restricted log-likelihood, up to a constant of the data; smaller is better.
    """

    status: Status
    parameters: Float
    covariance: Float
    rolling_noise_m: float
    spread: float
    birge_ratio: float | None
    coverage_factor: float
    degrees_of_freedom: float
    weight: Float
    residual: Float
    normalised: Float
    influence: Float
    deviance: float

    @property
    def u_quantities(self) -> Float:
        """Standard uncertainties (3,) of (tick factor, side ratio, width), relative."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def covariance_relative(self) -> Float:
        """Covariance (3, 3) of (left, right, width), each relative to its value."""
        forward = relative_from_quantities(float(self.parameters[1] / self.parameters[0]) - 1.0)
        return np.asarray(forward @ self.covariance @ forward.T)


@dataclass
class _State:
    """Where the iteration stands."""

    quantities: Float
    rolling: float
    spread: float = 0.0
    step: Float = field(default_factory=lambda: np.full(3, np.inf))


@dataclass(frozen=True)
class _Linear:
    """The runs, linearised at one point: residuals e (n, 4), Jacobian j (n, 4, 3), noise and spread per unit (n, 4,
    4).
    """

    e: Float
    j: Float
    noise: Float
    own: Float
    count: Float

    @property
    def spread(self) -> Float:
        return np.asarray(self.j @ _SPREAD_SHAPE @ self.j.transpose(0, 2, 1))


def fit(
    stack: Stack,
    closures: Closures,
    start: Float,
    hold: Hold | None = None,
    rolling_guess_m: float = DEFAULT_ROLLING_NOISE_M,
) -> Fit:
    """Fit parameters to the closures of n runs.

    Parameters
    ----------
    stack : Stack
        The runs, as maps or counts.
    closures : Closures
        Where they truly ended.
    start : (3,) float
        (k_L, k_R, W) near enough that no heading is a full turn off: see :mod:`registry.numerics.start_values`.
    hold : Hold, optional
        Quantities supplied from elsewhere, kept and carried with their covariance.
    rolling_guess_m : float
        Rolling noise expected before the data, square metres per metre.

    Raises
    ------
    ValueError
        Without runs.
    """
    if len(closures) == 0:
        raise ValueError("a fit needs at least one run")
    free = np.ones(3, dtype=np.bool_) if hold is None else ~hold.which
    start_quantities = to_quantities(start)
    if hold is not None:
        start_quantities = np.where(hold.which, hold.quantities, start_quantities)
    state = _State(start_quantities.copy(), 4.0 * rolling_guess_m)
    status: Status = "not converged"
    for iteration in range(_ITERATIONS):
        if not bool(np.all(stack.inside(to_parameters(state.quantities)))):
            status = "outside maps"
            break
        linear = _linearise(stack, closures, state.quantities)
        inverse, distance = _whiten(linear, state)
        weight = _weights(distance, linear.count, bounded=iteration < _BOUNDED_FIRST)
        information, gradient = _normal_equations(linear, inverse, weight)
        information += np.diag(_WEAK_SD**-2)
        gradient += (start_quantities - state.quantities) / _WEAK_SD**2
        state.step = _step(information, gradient, free)
        state.quantities = state.quantities + state.step
        moved = _update_noise(linear, inverse, weight, information, state, rolling_guess_m)
        sigma = np.sqrt(np.diag(np.linalg.inv(information)))
        settled = bool(np.all(np.abs(state.step) <= _SETTLED_STEP * sigma + 1e-12)) and moved < _SETTLED_NOISE
        if settled and iteration >= _BOUNDED_FIRST:
            if state.spread == 0.0 and _spread_wanted(linear, inverse, weight, information, state):
                state.spread = 1e-8
                continue
            status = "converged"
            break
    return _summarise(stack, closures, state, status, hold)


def _linearise(stack: Stack, closures: Closures, quantities: Float) -> _Linear:
    parameters = to_parameters(quantities)
    prediction = stack.predict(parameters)
    component = component_jacobian(prediction.pose)
    rows = component * closures.present[:, :, None]
    to_relative = relative_from_quantities(float(quantities[1]))
    j = rows @ (prediction.jacobian @ (parameters[:, None] * to_relative))
    noise = rows @ prediction.noise @ rows.transpose(0, 2, 1)
    own = misclosure_covariance(closures, np.zeros((len(closures), 3, 3)), component)
    return _Linear(
        misclosure(closures, prediction.pose), j, noise, own, closures.present.sum(axis=1).astype(np.float64)
    )


def _whiten(linear: _Linear, state: _State) -> tuple[Float, Float]:
    """Inverse covariances (n, 4, 4) and squared Mahalanobis distances (n,)."""
    covariance = linear.own + state.rolling * linear.noise
    if state.spread > 0.0:
        covariance = covariance + state.spread * linear.spread
    inverse = np.asarray(np.linalg.inv(covariance), dtype=np.float64)
    return inverse, np.asarray(np.einsum("ni,nij,nj->n", linear.e, inverse, linear.e))


def normal_score(squared_distance: Float, count: Float) -> Float:
    """Wilson-Hilferty score of a squared distance with ``count`` components: standard normal for a good run."""
    variance = 2.0 / (9.0 * count)
    return np.asarray((np.cbrt(squared_distance / count) - (1.0 - variance)) / np.sqrt(variance))


def _weights(squared_distance: Float, count: Float, bounded: bool) -> Float:
    """One within the bound; outside it, falling with the distance (bounded influence), later with its square
    (redescending).
    """
    variance = 2.0 / (9.0 * count)
    bound = count * (1.0 - variance + _BOUND_SCORE * np.sqrt(variance)) ** 3
    ratio = np.minimum(1.0, bound / np.maximum(squared_distance, 1e-300))
    return np.sqrt(ratio) if bounded else ratio


def _normal_equations(linear: _Linear, inverse: Float, weight: Float) -> tuple[Float, Float]:
    weighted = linear.j.transpose(0, 2, 1) @ (inverse * weight[:, None, None])
    return (weighted @ linear.j).sum(axis=0), np.einsum("nij,nj->i", weighted, linear.e)


def _step(information: Float, gradient: Float, free: Bool) -> Float:
    step = np.zeros(3)
    step[free] = np.linalg.solve(information[np.ix_(free, free)], gradient[free])
    return np.clip(step, -_STEP_LIMIT, _STEP_LIMIT)


def _scores(
    linear: _Linear, inverse: Float, weight: Float, information: Float, state: _State, parts: tuple[Float, ...]
) -> tuple[Float, Float]:
    """Restricted score and Fisher information of the variance parts, from the runs that fit."""
    residual = linear.e - linear.j @ state.step
    white = np.einsum("nij,nj->ni", inverse, residual)
    distance = np.einsum("ni,ni->n", residual, white)
    fits = (normal_score(distance, linear.count) < _OUTLIER_SCORE).astype(np.float64)
    projected = inverse @ linear.j
    parameter_covariance = np.linalg.inv(information)
    score = np.empty(len(parts))
    products = [inverse @ part for part in parts]
    for index, part in enumerate(parts):
        quadratic = np.einsum("ni,nij,nj->n", white, part, white) * weight
        trace = np.einsum("nii->n", products[index])
        back = projected.transpose(0, 2, 1) @ part @ projected
        correction = np.einsum("ij,nji->n", parameter_covariance, back) * weight
        score[index] = 0.5 * float((fits * (quadratic - trace + correction)).sum())
    fisher = np.array([[0.5 * float((fits * np.einsum("nij,nji->n", x, y)).sum()) for y in products] for x in products])
    return score, fisher


def _update_noise(
    linear: _Linear, inverse: Float, weight: Float, information: Float, state: _State, guess: float
) -> float:
    """One scoring step on ln q (held loosely at its guess) and, where in use, on ln of the spread; answers how far it
    moved.
    """
    parts = (linear.noise,) if state.spread == 0.0 else (linear.noise, linear.spread)
    values = np.array([state.rolling, state.spread][: len(parts)])
    score, fisher = _scores(linear, inverse, weight, information, state, parts)
    gradient, curvature = score * values, fisher * np.outer(values, values)
    gradient[0] -= np.log(state.rolling / guess) / _ROLLING_PRIOR_SD**2
    curvature[0, 0] += 1.0 / _ROLLING_PRIOR_SD**2
    if len(parts) == 2:
        curvature[1, 1] += 1e-3
    step = np.clip(np.linalg.solve(curvature, gradient), -1.0, 1.0)
    state.rolling = float(state.rolling * np.exp(step[0]))
    if len(parts) == 2:
        state.spread = float(state.spread * np.exp(step[1]))
    return float(np.abs(step).max())


def _spread_wanted(linear: _Linear, inverse: Float, weight: Float, information: Float, state: _State) -> bool:
    """Score test for spread from run to run at none, with the rolling noise as nuisance."""
    if linear.count.size < _SPREAD_MIN_RUNS:
        return False
    score, fisher = _scores(linear, inverse, weight, information, state, (linear.noise, linear.spread))
    remaining = fisher[1, 1] - fisher[0, 1] ** 2 / max(fisher[0, 0], 1e-300)
    return bool(remaining > 0.0 and score[1] / np.sqrt(remaining) > _SPREAD_SCORE)


def _summarise(stack: Stack, closures: Closures, state: _State, status: Status, hold: Hold | None) -> Fit:
    linear = _linearise(stack, closures, state.quantities)
    inverse, distance = _whiten(linear, state)
    weight = _weights(distance, linear.count, bounded=False)
    information, _ = _normal_equations(linear, inverse, weight)
    full = information + np.diag(_WEAK_SD**-2)
    free = np.ones(3, dtype=np.bool_) if hold is None else ~hold.which
    degrees = float((weight * linear.count).sum()) - float(free.sum())
    weighted = float((weight * distance).sum())
    birge = float(np.sqrt(weighted / degrees)) if degrees >= 1.0 else None
    effective = min(degrees, _satterthwaite_degrees(linear, inverse, weight, full, state.rolling))
    scale = max(1.0, birge**2) if birge is not None else 1.0
    log_determinants = float(np.log(np.linalg.det(inverse)).sum() + linear.count @ np.log(weight))
    return Fit(
        status=status,
        parameters=to_parameters(state.quantities),
        covariance=_covariance(full, scale, hold),
        rolling_noise_m=state.rolling,
        spread=float(np.sqrt(state.spread)),
        birge_ratio=birge,
        coverage_factor=float(stdtrit(max(1.0, effective), 0.975)),
        degrees_of_freedom=effective,
        weight=weight,
        residual=linear.e,
        normalised=normal_score(distance, linear.count),
        influence=_influence(linear, inverse, weight, full, free)
        @ relative_from_quantities(float(state.quantities[1])).T,
        deviance=float(np.linalg.slogdet(full)[1]) + weighted - log_determinants,
    )


def _satterthwaite_degrees(linear: _Linear, inverse: Float, weight: Float, information: Float, rolling: float) -> float:
    """Degrees of freedom of the least certain variance, from how far it follows an uncertain q.

    Why this form: with a known closure uncertainty a dozen runs fix the parameters far better than the noise between
    the
    marks, and a normal interval would pretend that q is known. The variance of ln q is the inverse of its Fisher
    information (Satterthwaite 1946: degrees = 2 var^2 / variance of var).
    """
    covariance = np.linalg.inv(information)
    projected = inverse @ linear.j
    part = rolling * linear.noise
    follows = ((projected.transpose(0, 2, 1) @ part @ projected) * weight[:, None, None]).sum(axis=0)
    share = np.diag(covariance @ follows @ covariance) / np.diag(covariance)
    product = inverse @ part
    fisher = 0.5 * float(np.einsum("nij,nji->", product, product)) + _ROLLING_PRIOR_SD**-2
    return float(2.0 * fisher / max(float(share.max()) ** 2, 1e-12))


def _covariance(information: Float, scale: float, hold: Hold | None) -> Float:
    """Inverse information; held quantities keep their own covariance and pass it on to the free ones."""
    if hold is None:
        return np.asarray(scale * np.linalg.inv(information))
    held, free = np.flatnonzero(hold.which), np.flatnonzero(~hold.which)
    covariance = np.zeros((3, 3))
    held_covariance = hold.covariance[np.ix_(held, held)]
    covariance[np.ix_(held, held)] = held_covariance
    if free.size:
        inner = np.linalg.inv(information[np.ix_(free, free)])
        passed = -inner @ information[np.ix_(free, held)]
        covariance[np.ix_(free, free)] = scale * inner + passed @ held_covariance @ passed.T
        covariance[np.ix_(free, held)] = passed @ held_covariance
        covariance[np.ix_(held, free)] = covariance[np.ix_(free, held)].T
    return covariance


def _influence(linear: _Linear, inverse: Float, weight: Float, information: Float, free: Bool) -> Float:
    """Change (n, 3) of the quantities without each run: one Newton step on the remaining ones."""
    weighted = linear.j.transpose(0, 2, 1) @ (inverse * weight[:, None, None])
    own_information, own_gradient = weighted @ linear.j, np.einsum("nij,nj->ni", weighted, linear.e)
    rest = (information[None] - own_information)[:, free][:, :, free]
    result = np.zeros((linear.e.shape[0], 3))
    result[:, free] = np.linalg.solve(rest, -own_gradient[:, free, None])[:, :, 0]
    return result


def scores_against(
    stack: Stack, closures: Closures, parameters: Float, covariance: Float, rolling_noise_m: float
) -> Float:
    """Normal score (n,) of each run's distance from parameters known with a covariance: standard normal while they
    hold.

    Parameters
    ----------
    parameters : (3,) float
        (k_L, k_R, W) in metres.
    covariance : (3, 3) float
        Of (ln tick factor, side ratio, ln width).
    rolling_noise_m : float
        Square metres per metre.
    """
    linear = _linearise(stack, closures, to_quantities(parameters))
    known = linear.j @ covariance @ linear.j.transpose(0, 2, 1)
    inverse = np.linalg.inv(linear.own + rolling_noise_m * linear.noise + known)
    distance = np.asarray(np.einsum("ni,nij,nj->n", linear.e, inverse, linear.e))
    return normal_score(distance, linear.count)


def misclosures(stack: Stack, closures: Closures, parameters: Float) -> Float:
    """Misclosures (n, 4) by any parameter set (3,)."""
    return misclosure(closures, stack.predict(parameters).pose)
