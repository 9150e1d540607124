r"""Restricted maximum likelihood of tick factors and width from the closures of many runs.

A misclosure has the covariance :math:`V = R + qN + \tau^2 J S J^T`: the closure's own, rolling noise, and the spread
of the parameters from run to run (load, surface, temperature), shaped like the usual tolerances. The quantities
(ln tick factor, side ratio, ln width) follow from damped Gauss-Newton steps with the analytic Jacobian
(:mod:`registry.numerics.least_squares`); after each step q (and :math:`\tau^2`, where the data ask for it) moves by one
Fisher-scoring step on the restricted likelihood (:mod:`registry.numerics.variance_parts`). One run's influence is
bounded: beyond a normalised distance its weight falls with the square of the distance, so that a reading that is a
metre wrong pulls less the wronger it is.

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

from dataclasses import dataclass
from typing import Literal

import numpy as np

from registry.numerics.arrays import Bool, Float
from registry.numerics.closure import Closures, misclosure
from registry.numerics.conformity import coverage_factor
from registry.numerics.least_squares import gauss_newton, solve
from registry.numerics.linearised import normal_score
from registry.numerics.misclosures import WEAK_SD, Misclosures, OutsideMapsError
from registry.numerics.observability import relative_from_quantities, to_parameters, to_quantities
from registry.numerics.stacks import Stack
from registry.numerics.variance_parts import ROLLING_PRIOR_SD, VarianceParts, Whitened

METHOD_VERSION = "1"

#: Rolling noise before any run has told: half a millimetre per square root of a metre, squared.
DEFAULT_ROLLING_NOISE_M = 2.5e-7
_STEP_LIMIT = 0.2
_ITERATIONS = 60
#: Settled: a step of a hundredth of the standard uncertainty.
_SETTLED_STEP = 1e-2

Status = Literal["converged", "not converged", "outside maps"]


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
    u_without : (n, 3) float
        Standard uncertainties of (tick factor, side ratio, width) if the run were left out; zero where held.
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
    u_without: Float
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
    start_quantities = to_quantities(start)
    if hold is not None:
        start_quantities = np.where(hold.which, hold.quantities, start_quantities)
    free = np.ones(3, dtype=np.bool_) if hold is None else ~hold.which
    model = Misclosures(stack, closures, start_quantities, free, rolling_guess_m)
    if not bool(np.all(stack.inside(to_parameters(start_quantities)))):
        return _summarise(model, hold, "outside maps")
    try:
        end = gauss_newton(model, model.at, _SETTLED_STEP, _STEP_LIMIT, _ITERATIONS)
    except OutsideMapsError:
        return _summarise(model, hold, "outside maps")
    return _summarise(model, hold, "converged" if end.converged else "not converged")


def _summarise(model: Misclosures, hold: Hold | None, status: Status) -> Fit:
    model.weigh(bounded=False)
    rows, weight, runs = model.rows(), model.weight, model.runs
    white = model.white()
    distance = (white**2).sum(axis=1)
    solution = solve(model.jacobian(model.at), model.residual(model.at))
    weighted = float(weight @ distance)
    root = model.root(solution)
    # What only the weak hold keeps in place takes no degree of freedom from the runs.
    determined = float(model.free.sum()) - float(((root / WEAK_SD[:, None]) ** 2).sum())
    degrees = float(weight @ runs.count) - determined
    birge = float(np.sqrt(weighted / degrees)) if degrees >= 1.0 else None
    effective = min(degrees, _satterthwaite_degrees(Whitened(runs, model.whitener, weight, root), model.parts))
    log_determinants = 2.0 * float(np.log(np.einsum("nii->ni", model.whitener)).sum()) + float(
        runs.count @ np.log(weight)
    )
    to_relative = relative_from_quantities(float(model.quantities[1]))
    scale = max(1.0, birge**2) if birge is not None else 1.0
    influence, variance_without = _influence(rows, white * np.sqrt(weight)[:, None], model.free)
    return Fit(
        status=status,
        parameters=to_parameters(model.quantities),
        covariance=_covariance(rows, root, scale, hold),
        rolling_noise_m=model.parts.rolling,
        spread=float(np.sqrt(model.parts.spread)),
        birge_ratio=birge,
        coverage_factor=coverage_factor(effective),
        degrees_of_freedom=effective,
        weight=weight,
        residual=runs.e,
        normalised=normal_score(distance, runs.count),
        influence=influence @ to_relative.T,
        u_without=np.sqrt(scale * variance_without),
        deviance=float(np.linalg.slogdet(rows.T @ rows)[1]) + weighted - log_determinants,
    )


def _satterthwaite_degrees(at: Whitened, parts: VarianceParts) -> float:
    """Degrees of freedom of the least certain variance, from how far it follows an uncertain q.

    Why this form: with a known closure uncertainty a dozen runs fix the parameters far better than the noise between
    the marks, and a normal interval would pretend that q is known. The variance of ln q is the inverse of its
    information (Satterthwaite 1946: degrees = 2 var^2 / variance of var).
    """
    part = at.whitener @ (parts.rolling * at.runs.noise) @ at.whitener.transpose(0, 2, 1)
    uncertain = at.whitener @ at.runs.j @ at.root
    follows = ((uncertain.transpose(0, 2, 1) @ part @ uncertain) * at.weight[:, None, None]).sum(axis=0)
    variance = np.einsum("ij,ij->i", at.root, at.root)
    free = variance > 0.0
    share = np.einsum("ij,jk,ik->i", at.root, follows, at.root)[free] / variance[free]
    information = 0.5 * float(np.einsum("nij,nij->", part, part)) + ROLLING_PRIOR_SD**-2
    return float(2.0 * information / max(float(share.max(initial=0.0)) ** 2, 1e-12))


def _covariance(rows: Float, root: Float, scale: float, hold: Hold | None) -> Float:
    """Of the quantities (3, 3); those held keep their own covariance and pass it on to the free ones."""
    covariance = scale * (root @ root.T)
    if hold is None:
        return np.asarray(covariance)
    held = np.where(np.outer(hold.which, hold.which), hold.covariance, 0.0)
    passed = np.diag(hold.which.astype(np.float64)) - root @ (root.T @ (rows.T @ rows))
    return np.asarray(covariance + passed @ held @ passed.T)


def _influence(rows: Float, white: Float, free: Bool) -> tuple[Float, Float]:
    """Change (n, 3) of the quantities without each run, one Newton step on the remaining ones, and their variances."""
    count = white.shape[0]
    own = rows[: 4 * count].reshape(count, 4, 3)[:, :, free]
    information = (rows.T @ rows)[np.ix_(free, free)]
    rest = np.linalg.inv(information - own.transpose(0, 2, 1) @ own)
    change, variance = np.zeros((count, 3)), np.zeros((count, 3))
    change[:, free] = -(rest @ own.transpose(0, 2, 1) @ white[:, :, None])[:, :, 0]
    variance[:, free] = np.einsum("nii->ni", rest)
    return change, variance


def misclosures(stack: Stack, closures: Closures, parameters: Float) -> Float:
    """Misclosures (n, 4) by any parameter set (3,)."""
    return misclosure(closures, stack.predict(parameters).pose)
