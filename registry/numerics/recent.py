r"""From which run on a window belongs to another state than before.

A robust fit of a window stays with its majority, and a drift hides in the mean. So every place at which the runs could
part is tried: the quantities that the runs from there on ask for are compared with those of the runs before, both
linearised at the window's fit, by :math:`d^T(A_1^{-1} + A_2^{-1})^{-1}d` with the information :math:`A` of each part
(the likelihood ratio of one change against none, Page 1955). What runs do not tell adds nothing to it. One run's share
is bounded by its weight in the fit, so that neither one nor two wild runs can part a window, and three that agree can.

The threshold is from simulation with normal deviates in three quantities: 20,000 windows of 60 quiet runs exceed it
once in 2,000 (0.9997 quantile 24.9 for 60 runs, 24.5 for 30, 23.2 for 12).

References
----------
.. [1] Page: A test for a change in a parameter occurring at an unknown point. Biometrika 42 (1955) 523-527.
"""

from __future__ import annotations

import numpy as np

from registry.numerics.closure import Closures
from registry.numerics.fit import Fit
from registry.numerics.linearised import linearise
from registry.numerics.misclosures import WEAK_SD
from registry.numerics.observability import to_quantities
from registry.numerics.stacks import Stack

_THRESHOLD = 24.5
#: One run is no state of its own.
_FEWEST = 2


def latest_state(stack: Stack, closures: Closures, answer: Fit) -> int:
    """Index of the first run of the latest state; 0 when all runs belong together.

    Parameters
    ----------
    stack : Stack
        The runs, in the order driven.
    closures : Closures
        Where they ended.
    answer : Fit
        The fit of all of them.
    """
    count = len(closures)
    if count < 2 * _FEWEST:
        return 0
    runs = linearise(stack, closures, to_quantities(answer.parameters))
    white = runs.whitener(answer.rolling_noise_m, answer.spread**2)
    weighted = (white @ runs.j).transpose(0, 2, 1) * answer.weight[:, None, None]
    information = np.cumsum(weighted @ (white @ runs.j), axis=0)
    score = np.cumsum(np.einsum("nij,njk,nk->ni", weighted, white, runs.e), axis=0)
    weak = np.diag(WEAK_SD**-2)
    before, after = information[:-1] + weak, information[-1] - information[:-1] + weak
    covariance_before, covariance_after = np.linalg.inv(before), np.linalg.inv(after)
    change = np.einsum("nij,nj->ni", covariance_after, score[-1] - score[:-1])
    change -= np.einsum("nij,nj->ni", covariance_before, score[:-1])
    ratio = np.einsum("ni,nij,nj->n", change, np.linalg.inv(covariance_before + covariance_after), change)
    place = int(np.argmax(ratio[_FEWEST - 1 : count - _FEWEST])) + _FEWEST - 1
    return place + 1 if float(ratio[place]) >= _THRESHOLD else 0
