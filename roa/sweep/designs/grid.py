"""A regular grid of cell centres: k points for every state, k**n in all."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class Grid:
    """Centres of the k**n equal cells of the box, k the largest whole number with k**n <= samples.

    The last state runs fastest. A grid with more points has other points, so it cannot be extended; it is not random,
    so it is one replicate and its interval is that of a deterministic design, whatever the seed.
    """

    in_rounds = False
    extendable = False
    interval = "deterministic: cells at the edge of the basin"

    def __init__(self, box: Array, seed: int, replicates: int, samples: int) -> None:
        n = len(box)
        self.points_per_state = _whole_root(samples, n)
        self.samples = self.points_per_state**n
        self.replicates = 1
        self.parts: dict[str, Any] = {"points_per_state": self.points_per_state}
        share = (np.arange(self.points_per_state) + 0.5) / self.points_per_state
        low, high = box[:, :1], box[:, 1:]
        self._axes = low + share * (high - low)  # (n, k)

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units."""
        n, k = self._axes.shape
        rest = np.arange(first, first + count)
        points = np.empty((count, n))
        for state in reversed(range(n)):
            rest, column = np.divmod(rest, k)
            points[:, state] = self._axes[state, column]
        return points


def _whole_root(samples: int, n: int) -> int:
    """Return the largest k >= 1 with k**n <= samples."""
    k = max(round(math.pow(samples, 1 / n)), 1)
    while k > 1 and k**n > samples:
        k -= 1
    return k
