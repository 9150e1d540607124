"""Four hundred vehicles: do the 95 % intervals cover, and is the fit as good as any can be?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from registry.numerics.fit import fit
from registry.numerics.linearised import linearise
from registry.numerics.observability import to_quantities
from registry.numerics.stacks import CountsStack
from registry.numerics.start_values import find_start

from .drives import Float, Session, session

pytestmark = pytest.mark.slow

VEHICLES = 400
#: Of these the start is searched from the ruler; the others begin a little off the truth, which ends at the same place
#: and takes a twentieth of the time.
SEARCHED = 20


@dataclass(frozen=True)
class Trial:
    """Of one vehicle: errors, standard uncertainties and best possible ones of the three quantities and of left, right
    and width, six in all, and the coverage factor.
    """

    error: Float
    u: Float
    best: Float
    coverage_factor: float


def _trial(seed: int) -> Trial:
    given = session(1000 + seed)
    truth = given.truth.parameters
    stack = CountsStack(given.counts, given.levers_m)
    if seed < SEARCHED:
        start = find_start(given.counts, given.levers_m, given.closures, np.array([3.5e-4, 3.5e-4, 0.62]))
    else:
        start = truth * (1.0 + 0.003 * np.random.default_rng(seed).standard_normal(3))
    found = fit(stack, given.closures, start)
    assert found.status == "converged", seed
    relative = np.sqrt(np.diag(found.covariance_relative))
    error = np.concatenate([to_quantities(found.parameters) - to_quantities(truth), np.log(found.parameters / truth)])
    return Trial(error, np.concatenate([found.u_quantities, relative]), _cramer_rao(given), found.coverage_factor)


def _cramer_rao(given: Session) -> Float:
    """The least standard deviations of an unbiased estimate of the quantities, knowing the true noise."""
    runs = linearise(CountsStack(given.counts, given.levers_m), given.closures, to_quantities(given.truth.parameters))
    covariance = runs.own + given.truth.rolling_noise_m * runs.noise
    information = np.einsum("nki,nkl,nlj->ij", runs.j, np.linalg.inv(covariance), runs.j)
    return np.asarray(np.sqrt(np.diag(np.linalg.inv(information))))


@pytest.fixture(scope="module")
def trials() -> list[Trial]:
    return [_trial(seed) for seed in range(VEHICLES)]


def test_95_percent_intervals_of_every_quantity_cover_92_to_98_percent(trials: list[Trial]) -> None:
    inside = np.array([np.abs(trial.error) <= trial.coverage_factor * trial.u for trial in trials])
    covered = inside.mean(axis=0)
    # Tick factor, side ratio, width; left, right, width.
    assert np.all(covered >= 0.92), covered
    assert np.all(covered <= 0.98), covered


def test_twelve_runs_determine_tick_factors_and_width_as_well_as_demanded(trials: list[Trial]) -> None:
    u = np.sqrt(np.mean([trial.u**2 for trial in trials], axis=0))
    assert u[3] < 0.0003
    assert u[4] < 0.0003
    assert u[5] < 0.0006


def test_errors_are_as_large_as_stated_and_within_a_quarter_of_the_least_possible(trials: list[Trial]) -> None:
    error = np.sqrt(np.mean([trial.error**2 for trial in trials], axis=0))
    best = np.sqrt(np.mean([trial.best**2 for trial in trials], axis=0))
    stated = np.sqrt(np.mean([trial.u**2 for trial in trials], axis=0))
    assert np.all(error[:3] < 1.25 * best), error[:3] / best
    assert error == pytest.approx(stated, rel=0.15)


def test_errors_have_no_bias(trials: list[Trial]) -> None:
    scaled = np.array([trial.error / trial.u for trial in trials])
    # The mean of 400 has a standard deviation of a twentieth; three of those and a half.
    assert np.abs(scaled.mean(axis=0)).max() < 0.18
