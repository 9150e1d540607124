"""Is a quantity beyond its tolerance? Decided by the probability that the true value is outside (JCGM 106:2012).

The conformance probability of an estimate y with standard uncertainty u against the interval [lower, upper] is
Phi((upper - y)/u) - Phi((lower - y)/u). What is called beyond stays so until that probability has clearly fallen: a
dead band keeps the answer from chattering.
"""

from __future__ import annotations

import math
from typing import Literal

from scipy.special import ndtr, stdtr, stdtrit

Decision = Literal["within", "uncertain", "beyond"]

ACT_AT = 0.95
WATCH_AT = 0.50
CLEAR_AT = 0.20


def probability_beyond(value: float, u: float, lower: float, upper: float, degrees: float = math.inf) -> float:
    """Probability that the true value is outside [lower, upper].

    Parameters
    ----------
    value, u : float
        Estimate and standard uncertainty.
    lower, upper : float
        Limits of the tolerance interval; either may be infinite.
    degrees : float
        Degrees of freedom behind u: Student's distribution for few of them, the normal for many.

    Raises
    ------
    ValueError
        When u is not above zero or the interval is empty.
    """
    if not u > 0.0:
        raise ValueError("the standard uncertainty must be above zero")
    if not upper > lower:
        raise ValueError("the tolerance interval is empty")
    # Two tails, not one minus the middle: the difference of two numbers near one would lose the small probabilities.
    below = 0.0 if math.isinf(lower) else _lower_tail((lower - value) / u, degrees)
    above = 0.0 if math.isinf(upper) else _lower_tail((value - upper) / u, degrees)
    return min(1.0, below + above)


def coverage_factor(degrees: float, probability: float = 0.95) -> float:
    """Student's factor that turns a standard uncertainty into the half width of a two-sided interval (GUM annex G).

    Parameters
    ----------
    degrees : float
        Degrees of freedom; taken as one where there are fewer.
    probability : float
        That the interval covers.
    """
    return float(stdtrit(max(1.0, degrees), 0.5 * (1.0 + probability)))


def _lower_tail(score: float, degrees: float) -> float:
    return float(ndtr(score)) if math.isinf(degrees) else float(stdtr(degrees, score))


def decide(probability: float, before: Decision | None = None) -> Decision:
    """Beyond from 95 %, uncertain from 50 %, within below; once beyond, it takes at most 20 % to be within again."""
    if probability >= ACT_AT:
        return "beyond"
    if before == "beyond" and probability > CLEAR_AT:
        return "uncertain"
    return "uncertain" if probability >= WATCH_AT else "within"
