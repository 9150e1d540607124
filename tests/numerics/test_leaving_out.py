"""What a fit says of itself without one of its runs, held against fitting without it."""

from __future__ import annotations

import numpy as np
import pytest

from registry.numerics.fit import Fit, fit
from registry.numerics.stacks import CountsStack

from .drives import Truth, drive, read_ends, session, square, straight


def fitted(counts: list, levers_m: np.ndarray, closures, start: np.ndarray, keep: np.ndarray) -> Fit:
    chosen = [pair for pair, kept in zip(counts, keep, strict=True) if kept]
    return fit(CountsStack(chosen, levers_m[keep]), closures.take(keep), start)


def test_influence_and_uncertainty_without_a_run_are_those_of_a_fit_without_it() -> None:
    made = session(11)
    start = made.truth.parameters
    whole = fitted(made.counts, made.levers_m, made.closures, start, np.ones(12, dtype=np.bool_))
    for index in range(12):
        rest = fitted(made.counts, made.levers_m, made.closures, start, np.arange(12) != index)
        u = np.sqrt(np.diag(whole.covariance_relative))
        moved = rest.parameters / whole.parameters - 1.0
        # To first order, and with noise and weights as all runs give them: half a standard uncertainty.
        assert np.all(np.abs(whole.influence[index] - moved) < 0.5 * u)
        assert whole.u_without[index] == pytest.approx(rest.u_quantities, rel=0.35)
        assert np.all(whole.u_without[index] >= whole.u_quantities * (1 - 1e-9))


def test_the_only_run_that_tells_a_quantity_leaves_it_open_when_it_is_left_out() -> None:
    truth, rng = Truth(rolling_noise_m=0.49e-6), np.random.default_rng(4)
    driven = [drive(legs, truth, rng) for legs in (square(3.0, 1), square(3.0, -1), straight(10.0))]
    closures = read_ends(driven, rng)
    counts = [one.ticks for one in driven]
    whole = fitted(counts, np.zeros((3, 2)), closures, truth.parameters, np.ones(3, dtype=np.bool_))
    assert whole.u_quantities[0] < 0.002
    # Squares close whatever the scale is: only the weak hold of one in the logarithm is left.
    assert whole.u_without[2, 0] > 0.2
    assert whole.u_without[0, 0] < 0.01
