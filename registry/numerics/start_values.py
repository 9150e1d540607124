r"""A first guess of the parameters from runs, when the ruler's width may be wrong by 10 to 80 % and headings wrap.

Runs that hardly turn give the scale; then every width on a grid fine enough that no heading can slip a full turn
between neighbours is tried, with the side ratio that the straight runs ask for at that width. The best few are refined
by the fit itself on thinned counts, and the one with the smallest deviance is the start.

Why this form: the deviance in the width has one minimum per whole turn of the most turning run. A search over all of
them costs a fraction of a second once per baseline; a descent from the ruler's width finds the wrong one.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from registry.numerics.arrays import Float
from registry.numerics.closure import DISTANCE, HEADING, Closures, misclosure
from registry.numerics.fit import fit
from registry.numerics.kinematics import sinc_and_slope
from registry.numerics.stacks import CountsStack

_WIDTH_RANGE = (0.5, 2.2)
_STRAIGHT_RAD = 0.6
_THINNED_SAMPLES = 400
_CANDIDATES = 6
_SIDE_RATIO_LIMIT = 0.05
#: How well a grid point may be expected to predict: 3 % of the way and 0.15 rad, beside the closure's own uncertainty.
_ROUGH_SHARE = 0.03
_ROUGH_HEADING_RAD = 0.15


def find_start(counts: Sequence[tuple[Float, Float]], levers_m: Float, closures: Closures, nominal: Float) -> Float:
    """Start values (k_L, k_R, W) for a fit.

    Parameters
    ----------
    counts : sequence of ((n,), (n,)) float
        Increments left and right of every run.
    levers_m : (runs, 2) float
        Reference points, ahead and left of the axle's middle.
    closures : Closures
        Of the same runs.
    nominal : (3,) float
        As measured with a ruler.
    """
    thinned = [(_thin(left), _thin(right)) for left, right in counts]
    stack = CountsStack(thinned, levers_m)
    totals = np.array([(left.sum(), right.sum()) for left, right in counts])
    rolled = np.array([0.5 * (np.abs(left).sum() + np.abs(right).sum()) for left, right in counts])
    scale = _scale(stack, closures, nominal)
    scaled = np.array([nominal[0] * scale, nominal[1] * scale, nominal[2]])
    turn = np.abs(scaled[1] * totals[:, 1] - scaled[0] * totals[:, 0]) / scaled[2]
    count = int(np.clip(np.log(_WIDTH_RANGE[1] / _WIDTH_RANGE[0]) * float(turn.max()) / 0.5, 48, 400))
    widths = nominal[2] * np.geomspace(*_WIDTH_RANGE, count)
    candidates = np.array([_with_side_ratio(scaled, width, totals, closures) for width in widths])
    joined = _Joined(thinned, levers_m)
    costs = np.array([_rough_cost(joined, closures, item, rolled * scaled[0]) for item in candidates])
    lowest = np.flatnonzero((costs <= np.r_[np.inf, costs[:-1]]) & (costs <= np.r_[costs[1:], np.inf]))
    best = lowest[np.argsort(costs[lowest])][:_CANDIDATES]
    fits = [fit(stack, closures, candidates[index]) for index in best]
    return min(fits, key=lambda item: item.deviance).parameters


def _thin(ticks: Float) -> Float:
    """Increments added up over neighbouring samples: coarser arcs of the same path, good enough to choose a start."""
    together = max(1, ticks.size // _THINNED_SAMPLES)
    return np.add.reduceat(ticks, np.arange(0, ticks.size, together)) if ticks.size else ticks


def _scale(stack: CountsStack, closures: Closures, nominal: Float) -> float:
    """Median ratio of measured to predicted distance over the runs that hardly turn; one without such runs."""
    pose = stack.predict(nominal).pose
    with_position = closures.present[:, 0] & closures.present[:, 1]
    measured = np.where(
        closures.present[:, DISTANCE],
        closures.measured[:, DISTANCE],
        np.where(with_position, np.hypot(closures.measured[:, 0], closures.measured[:, 1]), np.nan),
    )
    # Where only x was measured on a straight, it is the distance to second order.
    only_ahead = closures.present[:, 0] & ~closures.present[:, 1] & ~closures.present[:, DISTANCE]
    measured = np.where(only_ahead, np.abs(closures.measured[:, 0]), measured)
    predicted = np.hypot(pose[:, 0], pose[:, 1])
    usable = (np.abs(pose[:, 2]) < _STRAIGHT_RAD) & np.isfinite(measured) & (predicted > 0.3)
    if not usable.any():
        return 1.0
    return float(np.clip(np.median(measured[usable] / predicted[usable]), 0.2, 5.0))


def _with_side_ratio(scaled: Float, width: float, totals: Float, closures: Closures) -> Float:
    """Parameters at one width, with the median side ratio that headings of straight runs ask for there."""
    k = 0.5 * (scaled[0] + scaled[1])
    turn = (scaled[1] * totals[:, 1] - scaled[0] * totals[:, 0]) / width
    straight = closures.present[:, HEADING] & (np.abs(turn) < _STRAIGHT_RAD) & (np.abs(totals.sum(axis=1)) * k > 1.0)
    ratio = float(scaled[1] / scaled[0]) - 1.0
    if straight.any():
        wanted = closures.measured[straight, HEADING] * width / k - (totals[straight, 1] - totals[straight, 0])
        ratio = float(np.median(wanted / (0.5 * totals[straight].sum(axis=1))))
    ratio = float(np.clip(ratio, -_SIDE_RATIO_LIMIT, _SIDE_RATIO_LIMIT))
    return np.array([k * (1.0 - 0.5 * ratio), k * (1.0 + 0.5 * ratio), width])


class _Joined:
    """All runs in one row of samples, so that a point of the grid costs one pass over them and no loop over runs."""

    def __init__(self, counts: Sequence[tuple[Float, Float]], levers_m: Float) -> None:
        # A first sample of nothing keeps a run without samples from borrowing its neighbour's.
        left, right = ([np.concatenate([[0.0], run[side]]) for run in counts] for side in (0, 1))
        self.left, self.right = 0.5 * np.concatenate(left), 0.5 * np.concatenate(right)
        self.left_middle = np.concatenate([np.cumsum(run) for run in left]) - self.left
        self.right_middle = np.concatenate([np.cumsum(run) for run in right]) - self.right
        self.begin = np.cumsum([0, *(run.size for run in left[:-1])])
        self.totals = np.array([(a.sum(), b.sum()) for a, b in zip(left, right, strict=True)])
        self.levers_m = np.asarray(levers_m, dtype=np.float64)

    def poses(self, parameters: Float) -> Float:
        """End poses (n, 3) of the reference points."""
        width = float(parameters[2])
        a, b = float(parameters[0]) / width, float(parameters[1]) / width
        left, right = a * self.left, b * self.right
        step = (left + right) * sinc_and_slope(right - left)[0]
        heading = b * self.right_middle - a * self.left_middle
        x = width * np.add.reduceat(step * np.cos(heading), self.begin)
        y = width * np.add.reduceat(step * np.sin(heading), self.begin)
        turn = b * self.totals[:, 1] - a * self.totals[:, 0]
        arm = self.levers_m[:, 0] + 1j * self.levers_m[:, 1]
        end = x + 1j * y + arm * (np.exp(1j * turn) - 1.0)
        return np.stack([end.real, end.imag, turn], axis=1)


def _rough_cost(runs: _Joined, closures: Closures, parameters: Float, rolled_m: Float) -> float:
    """Sum of logarithms of rough squared distances: one hopeless run cannot hide a good width."""
    difference = misclosure(closures, runs.poses(parameters))
    rough = np.repeat((_ROUGH_SHARE * rolled_m)[:, None] ** 2, 4, axis=1)
    rough[:, HEADING] = _ROUGH_HEADING_RAD**2
    return float(np.log1p((difference**2 / (closures.variance + rough)).sum(axis=1)).sum())
