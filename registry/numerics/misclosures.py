"""The runs as the least-squares machinery sees them: whitened, weighed, and held weakly at the start."""

from __future__ import annotations

import numpy as np

from registry.numerics.arrays import Bool, Float
from registry.numerics.closure import Closures
from registry.numerics.least_squares import Solution
from registry.numerics.linearised import linearise, robust_weight
from registry.numerics.observability import to_parameters
from registry.numerics.stacks import Stack
from registry.numerics.variance_parts import VarianceParts, Whitened

#: A direction the runs leave free is kept at the start value with these standard deviations; a third of any tolerance
#: is far below. The side ratio of a drive that goes straight is never far from its start, and on straight distances
#: alone it acts by its square only: held more loosely it would wander there.
WEAK_SD = np.array([1.0, 0.02, 1.0])
#: Steps with bounded influence before far runs lose theirs altogether: a poor start must not choose its outliers. They
#: end early once a step is within this share of the standard uncertainties and of the variances.
_BOUNDED_FIRST = 5
_CALM = 0.1
#: The variances stand when a step moves them by less than this share.
_SETTLED_NOISE = 1e-2


class OutsideMapsError(Exception):
    """A step led out of the box of a map."""


class Misclosures:
    """The runs as the least-squares machinery sees them: whitened, weighed, and held weakly at the start."""

    def __init__(self, stack: Stack, closures: Closures, start: Float, free: Bool, guess: float) -> None:
        self.stack = stack
        self.closures = closures
        self.start = start
        self.free = free
        self.parts = VarianceParts(guess, rolling=4.0 * guess)
        self.rounds = 0
        self.bounded = True
        self.at = start[self.free]
        self.runs = linearise(stack, closures, start)
        self.weigh(self.bounded)

    @property
    def quantities(self) -> Float:
        """All three where the runs are linearised."""
        return self._all(self.at)

    def _all(self, at: Float) -> Float:
        quantities = self.start.copy()
        quantities[self.free] = at
        return quantities

    def _move(self, at: Float) -> None:
        """Linearise again, only where the point has moved."""
        if np.array_equal(at, self.at):
            return
        quantities = self._all(at)
        if not bool(np.all(self.stack.inside(to_parameters(quantities)))):
            raise OutsideMapsError
        self.runs, self.at = linearise(self.stack, self.closures, quantities), at.copy()

    def weigh(self, bounded: bool) -> None:
        """Bring whiteners (n, 4, 4) and weights (n,) up to date with the variances, where the runs are linearised."""
        self.whitener = self.runs.whitener(self.parts.rolling, self.parts.spread)
        self.weight = robust_weight((self.white() ** 2).sum(axis=1), self.runs.count, bounded)

    def white(self) -> Float:
        """Whitened misclosures (n, 4), not weighed."""
        return np.asarray(np.einsum("nij,nj->ni", self.whitener, self.runs.e))

    def residual(self, at: Float) -> Float:
        """Whitened, weighed misclosures, and how far the start is away."""
        self._move(at)
        white = self.white() * np.sqrt(self.weight)[:, None]
        return np.concatenate([white.ravel(), ((self.start - self.quantities) / WEAK_SD)[self.free]])

    def jacobian(self, at: Float) -> Float:
        """Of the free quantities."""
        self._move(at)
        used = np.concatenate([np.ones(4 * self.weight.size, dtype=np.bool_), self.free])
        return np.asarray(self.rows()[used][:, self.free])

    def rows(self) -> Float:
        """Whitened, weighed derivatives of all three quantities, and the weak hold of each: (4 n + 3, 3)."""
        white = (self.whitener @ self.runs.j) * np.sqrt(self.weight)[:, None, None]
        return np.concatenate([white.reshape(-1, 3), np.diag(1.0 / WEAK_SD)])

    def settle(self, at: Float, solution: Solution, still: bool) -> bool:
        """Move the variances by one step, and the weights with them."""
        self._move(at)
        self.rounds += 1
        seen = Whitened(self.runs, self.whitener, self.weight, self.root(solution))
        moved = self.parts.step(seen)
        stand = still and moved < _SETTLED_NOISE and not self.bounded
        stand = stand and not self.parts.take_up_spread(seen)
        calm = moved < _CALM and bool(np.all(np.abs(solution.change) < _CALM * solution.u))
        self.bounded = self.bounded and not calm and self.rounds < _BOUNDED_FIRST
        self.weigh(self.bounded)
        return stand

    def root(self, solution: Solution) -> Float:
        """Root (3, p) of the covariance of all three quantities, those held without any."""
        root = np.zeros((3, solution.root.shape[1]))
        root[self.free] = solution.root
        return root
