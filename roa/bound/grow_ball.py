"""Branch and bound: the nearest point at which the remainder reaches the margin of the linear part.

The proved radius is a minimum: of |y|^2 over the points with φ(y) = |M(y)|^2 - λ^2 |y|^2 >= 0. Boxes are
taken nearest first. A point of a box with φ >= 0 has |y|^2 >= |y|^2 - μ φ(y) for any μ >= 0; with μ from the
gradients at the centre this lower bound is exact to second order at the minimiser, so that boxes around it
do not cluster. The nearest box that is left tells how far the ball has been proved, at any time: when the
budget ends, the answer is a smaller ball and never a wrong one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.bound.remainder import Jets, Remainder
from roa.bound.taylor import upper_bounds
from roa.kernel.interval_arrays import IntervalArray

Array = NDArray[np.float64]

BOXES = 100_000  # most boxes of one search
WORK = 2e8  # most elementary interval operations of one search: fewer boxes where there are many states
TOLERANCE = 1e-5  # relative, on r^2: stop when a point with φ >= 0 is known this close
BATCH = 64  # boxes taken at once, at least
PROBES = 16  # rays, and points on each, on which a nearer end of the ball is looked for in every round


def grow_ball(remainder: Remainder, first: float, reach: float) -> float:
    """Return the largest radius up to `reach` on which the remainder is proved to stay below the margin.

    Parameters
    ----------
    remainder : Remainder
    first : radius on which that has been proved already
    reach : radius of the largest ball inside the domain
    """
    return _Search(remainder, first, reach).radius()


@dataclass
class _Queue:
    """Boxes [low, high] (m, n) in which φ >= 0 is possible, at |y|^2 >= key (m,) only; `side` is to be split."""

    low: Array
    high: Array
    key: Array
    side: NDArray[np.int64]

    def take(self, chosen: NDArray[np.int64]) -> _Queue:
        """Return the chosen boxes."""
        return _Queue(self.low[chosen], self.high[chosen], self.key[chosen], self.side[chosen])

    def joined(self, other: _Queue) -> _Queue:
        """Return the boxes of both."""
        return _Queue(
            np.concatenate([self.low, other.low]),
            np.concatenate([self.high, other.high]),
            np.concatenate([self.key, other.key]),
            np.concatenate([self.side, other.side]),
        )

    def halves(self) -> tuple[Array, Array, Array]:
        """Split every box at the middle of its side: low, high and key of twice as many."""
        rows = np.arange(len(self.key))
        middle = (self.low[rows, self.side] + self.high[rows, self.side]) / 2
        low, high = self.low.copy(), self.high.copy()
        low[rows, self.side] = high[rows, self.side] = middle
        low, high = np.concatenate([self.low, low]), np.concatenate([high, self.high])
        return low, high, np.concatenate([self.key, self.key])


class _Search:
    """Branch and bound for the nearest point at which the remainder reaches the margin."""

    def __init__(self, remainder: Remainder, first: float, reach: float) -> None:
        self._remainder = remainder
        self._n = remainder.n
        self._first, self._reach = first, reach
        self._nearest = np.inf  # |y|^2 of the nearest known point with φ >= 0
        self._budget = min(BOXES, int(WORK / remainder.work))

    def radius(self) -> float:
        """Largest radius proved within the budget."""
        cube = np.full((1, self._n), self._reach)
        queue = _Queue(-cube, cube, np.array([_below(self._first * self._first)]), np.zeros(1, dtype=np.int64))
        goal = self._reach * self._reach
        while len(queue.key) and self._budget > 0:
            nearest = queue.key.min()
            if nearest >= goal or nearest >= self._nearest * (1 - TOLERANCE):
                break
            order = np.argsort(queue.key, kind="stable")
            count = max(BATCH, len(order) // 8)
            chosen, rest = queue.take(order[:count]), queue.take(order[count:])
            self._probe(chosen)
            queue = rest.joined(self._examine(*chosen.halves()))
        proved = min(queue.key.min(initial=np.inf), goal)
        return self._reach if proved == goal else max(self._first, float(np.nextafter(np.sqrt(_below(proved)), 0)))

    def _probe(self, queue: _Queue) -> None:
        """Look for a nearer point with φ >= 0 on the rays through the nearest boxes: it tells when to stop."""
        centre = (queue.low[:PROBES] + queue.high[:PROBES]) / 2
        size = np.linalg.norm(centre, axis=1)
        direction = (centre[size > 0] / size[size > 0, None])[:, None]
        farthest = min(np.sqrt(self._nearest), self._reach)
        points = (direction * np.linspace(np.sqrt(queue.key[0]), farthest, PROBES)[:, None]).reshape(-1, self._n)
        reached = points[self._remainder.reached(points)]
        self._nearest = min(self._nearest, np.einsum("bi,bi->b", reached, reached).min(initial=np.inf))

    def _examine(self, low: Array, high: Array, key: Array) -> _Queue:
        """Raise the keys of the boxes, and leave out those that hold no candidate within reach."""
        self._budget -= len(low)
        centre = (low + high) / 2
        radius = np.nextafter(np.maximum(high - centre, centre - low), np.inf)
        at, over = self._remainder.jets(low, high, centre)
        one = np.ones(len(low))
        # No candidate: φ < 0 throughout, or φ + λ^2 (|y|^2 - key) < 0, which is the larger where |y|^2 >= key.
        weight = self._remainder.weight
        none = _upper(at, over, radius, one, 0 * one) < 0
        none |= _upper(at, over, radius, one, weight * one) < _below(weight) * key
        key = np.maximum.reduce([key, over[1].value.low, -_upper(at, over, radius, _multiplier(at), -one)])
        corner = np.maximum(np.abs(low), np.abs(high))
        farthest = np.einsum("bi,bi->b", corner, corner) * (1 + 1e-14)
        keep = ~(none | (farthest <= self._first * self._first) | (key >= self._reach * self._reach))
        return _Queue(low[keep], high[keep], key[keep], _widest(over[0].gradient, radius)[keep])


def _below(square: Any) -> Any:
    return square * (1 - 1e-15)


def _multiplier(at: Jets) -> Array:
    """The μ >= 0 that leaves the least slope of |y|^2 - μ φ at the centres, (m,)."""
    slope, outward = at[0].gradient.middle, at[1].gradient.middle
    with np.errstate(invalid="ignore", divide="ignore"):
        mu = np.einsum("bi,bi->b", slope, outward) / np.einsum("bi,bi->b", slope, slope)
    return np.where(np.isfinite(mu), np.maximum(mu, 0.0), 0.0)


def _upper(at: Jets, over: Jets, radius: Array, phi: Array, distance: Array) -> Array:
    """Upper bounds over the boxes of phi φ(y) + distance |y|^2, with a pair of float weights for each box."""

    def combine(first: IntervalArray, second: IntervalArray) -> IntervalArray:
        index = (slice(None),) + (None,) * (first.low.ndim - 1)
        return phi[index] * first + distance[index] * second

    return upper_bounds(
        combine(at[0].value, at[1].value),
        combine(at[0].gradient, at[1].gradient),
        combine(over[0].value, over[1].value),
        combine(over[0].gradient, over[1].gradient),
        combine(over[0].hessian, over[1].hessian),
        radius,
    )


def _widest(gradient: IntervalArray, radius: Array) -> NDArray[np.int64]:
    """Side to split: where the slope of φ varies most over the box, unless a side has become too long."""
    with np.errstate(invalid="ignore"):
        spread = (gradient.high - gradient.low) * radius
    spread = np.where(np.isfinite(spread), spread, np.inf)
    by_spread, by_width = np.argmax(spread, axis=1), np.argmax(radius, axis=1)
    rows = np.arange(len(radius))
    lopsided = radius[rows, by_spread] * 8 < radius[rows, by_width]
    return np.asarray(np.where(lopsided, by_width, by_spread))
