"""The fit where it is linear, against statsmodels and against scipy's optimiser on the restricted likelihood.

On straight runs whose straight distance alone is measured, with side ratio and width held, a misclosure is linear in
the tick factor, and its variance is the reading's own, rolling noise in proportion to the distance, and spread in
proportion to its square: a weighted regression through the origin, or a mixed model.

References
----------
.. [1] Seabold and Perktold: Statsmodels: econometric and statistical modeling with Python. 9th Python in Science
   Conference 2010. Used as a program: WLS and MixedLM (restricted maximum likelihood).
.. [2] Patterson and Thompson: Recovery of inter-block information when block sizes are unequal. Biometrika 58 (1971)
   545-554. The restricted likelihood, written out below as in textbooks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray
from scipy.optimize import minimize

from registry.numerics.closure import Closures
from registry.numerics.fit import Fit, Hold, fit
from registry.numerics.observability import to_quantities
from registry.numerics.stacks import CountsStack

Float = NDArray[np.float64]

TICK = 1e-3
NOMINAL = np.array([TICK, TICK, 0.5])


@dataclass(frozen=True)
class Straights:
    """Lengths by the nominal tick factor, measured distances, and the standard uncertainty of each."""

    nominal_m: Float
    measured_m: Float
    u_m: Float

    def fit(self, rolling_guess_m: float) -> Fit:
        count = self.nominal_m.size
        ticks = [np.full(10, length / TICK / 10) for length in self.nominal_m]
        measured = np.zeros((count, 4))
        measured[:, 3] = self.measured_m
        variance = np.ones((count, 4))
        variance[:, 3] = self.u_m**2
        present = np.tile([False, False, False, True], (count, 1))
        closures = Closures(measured, present, variance, np.zeros(count, dtype=np.bool_))
        stack = CountsStack([(side, side) for side in ticks], np.zeros((count, 2)))
        hold = Hold(np.array([False, True, True]), to_quantities(NOMINAL), np.zeros((3, 3)))
        return fit(stack, closures, NOMINAL, hold, rolling_guess_m)


def _straights(seed: int, count: int, q: float, spread: float, u_m: float, bound: float = 1.9) -> Straights:
    rng = np.random.default_rng(seed)
    nominal = rng.uniform(2.0, 60.0, count)
    u = u_m * rng.uniform(0.8, 1.6, count)
    sd = np.sqrt(u**2 + q * nominal / 2 + (spread * nominal) ** 2)
    # Deviates cut short of two standard deviations: no robust weight comes in, so that all programs solve the same
    # problem.
    deviate = np.clip(rng.standard_normal(count), -bound, bound)
    return Straights(nominal, 1.004 * nominal + sd * deviate, u)


def _scale(found: Fit) -> float:
    return float(found.parameters[:2].mean() / TICK)


def test_a_weighted_regression_through_the_origin_gives_the_same_scale_and_uncertainty() -> None:
    data = _straights(seed=5, count=25, q=0.0, spread=0.0, u_m=0.005)
    found = data.fit(rolling_guess_m=1e-13)
    regression = sm.WLS(data.measured_m, data.nominal_m, weights=data.u_m**-2.0).fit()
    assert found.weight == pytest.approx(np.ones(25))
    assert found.birge_ratio is not None
    assert _scale(found) == pytest.approx(float(regression.params[0]), rel=1e-9)
    # The residual scale of a regression is the squared Birge ratio; ours counts only where it is above one.
    assert found.birge_ratio == pytest.approx(float(np.sqrt(regression.scale)), rel=1e-5)
    known = float(np.sqrt(regression.normalized_cov_params[0, 0]))
    assert found.u_quantities[0] * _scale(found) == pytest.approx(known * max(1.0, found.birge_ratio), rel=1e-4)


def test_readings_that_scatter_more_than_stated_widen_the_uncertainty_as_a_regression_does() -> None:
    # Seven runs: from eight on, a spread from run to run would be looked for instead.
    data = _straights(seed=6, count=7, q=0.0, spread=0.0, u_m=0.005, bound=1.3)
    optimistic = Straights(data.nominal_m, data.measured_m, data.u_m / 1.6)
    found = optimistic.fit(rolling_guess_m=1e-13)
    regression = sm.WLS(data.measured_m, data.nominal_m, weights=data.u_m**-2.0).fit()
    assert found.birge_ratio is not None
    assert found.birge_ratio > 1.1
    assert found.weight == pytest.approx(np.ones(7))
    assert found.u_quantities[0] * _scale(found) == pytest.approx(float(regression.bse[0]), rel=1e-4)


def test_rolling_noise_is_the_variance_of_a_mixed_model() -> None:
    """MixedLM estimates the readings' variance and a coefficient of the root of the distance in every run. At its
    optimum, with the readings' variance taken from it, ours must find the same rolling noise, scale and uncertainty.
    """
    rng = np.random.default_rng(11)
    nominal = np.tile([4.0, 12.0, 30.0, 60.0], 20)
    q, u = 4e-6, 0.004
    sd = np.sqrt(u**2 + q * nominal / 2)
    measured = 1.004 * nominal + sd * np.clip(rng.standard_normal(nominal.size), -1.8, 1.8)
    # In millimetres the program's optimiser sees numbers near one.
    mixed = sm.MixedLM(
        1000 * measured, nominal[:, None], groups=np.arange(nominal.size), exog_re=np.sqrt(nominal / 2)[:, None]
    ).fit(reml=True, method="bfgs")
    q_mixed, u_mixed = 1e-6 * float(mixed.cov_re[0, 0]), 1e-3 * float(np.sqrt(mixed.scale))
    data = Straights(nominal, measured, np.full(nominal.size, u_mixed))
    # Expecting what the mixed model found takes the pull off the loose hold on q; the iteration starts at four times
    # it.
    found = data.fit(rolling_guess_m=q_mixed)
    assert found.weight == pytest.approx(np.ones(nominal.size))
    assert found.rolling_noise_m == pytest.approx(q_mixed, rel=0.01)
    assert _scale(found) == pytest.approx(float(mixed.fe_params[0]) / 1000, rel=1e-8)
    birge = max(1.0, found.birge_ratio or 1.0)
    assert found.u_quantities[0] * _scale(found) / birge == pytest.approx(float(mixed.bse_fe[0]) / 1000, rel=2e-3)


def _minus_twice_restricted_likelihood(logs: Float, data: Straights, guess: float) -> float:
    """Of ln q and ln spread squared, with the loose hold on ln q (standard deviation 1.5), up to a constant."""
    q, spread = np.exp(logs)
    variance = data.u_m**2 + q * data.nominal_m / 2 + spread * (1.004 * data.nominal_m) ** 2
    information = float((data.nominal_m**2 / variance).sum())
    scale = float((data.nominal_m * data.measured_m / variance).sum()) / information
    squares = float(((data.measured_m - scale * data.nominal_m) ** 2 / variance).sum())
    hold = (np.log(q / guess) / 1.5) ** 2
    return float(np.log(variance).sum() + np.log(information) + squares + hold)


def test_spread_from_run_to_run_is_where_the_restricted_likelihood_is_highest() -> None:
    data = _straights(seed=3, count=60, q=1e-6, spread=2e-3, u_m=0.004, bound=1.8)
    guess = 1e-6
    found = data.fit(rolling_guess_m=guess)
    best = minimize(
        _minus_twice_restricted_likelihood,
        np.log([guess, 1e-6]),
        args=(data, guess),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-9, "maxiter": 4000},
    )
    q, spread = np.exp(best.x)
    assert found.weight == pytest.approx(np.ones(60))
    # Settled means the variances known to 1 % of themselves, the spread being half of that.
    assert found.spread == pytest.approx(np.sqrt(spread), rel=0.01)
    assert found.rolling_noise_m == pytest.approx(q, rel=0.03)
    at_ours = _minus_twice_restricted_likelihood(np.log([found.rolling_noise_m, found.spread**2]), data, guess)
    assert at_ours - best.fun < 1e-3
