"""The share of a sweep's samples that have some property, with the interval that fits their design."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import Interval, clopper_pearson, grid_interval, replicate_interval

# Hits and samples of each replicate.
ByReplicate = tuple[tuple[int, ...], tuple[int, ...]]


class Tally(Protocol):
    """What a sweep says of a share, whatever its design."""

    @property
    def by_replicate(self) -> ByReplicate:
        """Hits and samples of each replicate; none where the starts are not spread evenly."""
        ...

    def add(self, first: int, yes: NDArray[np.bool_]) -> None:
        """Take the answers of starts first, first + 1, …, bool (m,), in the order of the indices."""
        ...

    @property
    def samples(self) -> int:
        """Number of starts."""
        ...

    @property
    def refusal(self) -> str:
        """Why no share is stated, a sentence; empty where one is."""
        ...

    @property
    def fraction(self) -> float:
        """Share of the domain; NaN where it is refused."""
        ...

    def interval(self, n: int, confidence: float) -> Interval:
        """Two-sided interval of the share in a domain of n states."""
        ...


class Share:
    """Counts yes and no, slice by slice in the order of the indices.

    Sample i belongs to replicate i mod R. For the design `grid` every answer is kept, one byte each, since the
    interval there comes from neighbours.
    """

    refusal = ""

    def __init__(self, design: str, replicates: int) -> None:
        self.design = design
        self.hits = np.zeros(max(replicates, 1), dtype=np.int64)
        self.sizes = np.zeros(max(replicates, 1), dtype=np.int64)
        self._answers: list[NDArray[np.bool_]] = []

    def add(self, first: int, yes: NDArray[np.bool_]) -> None:
        """Count the answers of samples first, first + 1, …, bool (m,)."""
        replicate = (first + np.arange(len(yes))) % len(self.hits)
        self.sizes += np.bincount(replicate, minlength=len(self.hits))
        self.hits += np.bincount(replicate[yes], minlength=len(self.hits))
        if self.design == "grid":
            self._answers.append(yes)

    @property
    def by_replicate(self) -> ByReplicate:
        """Hits and samples of each replicate."""
        return tuple(self.hits.tolist()), tuple(self.sizes.tolist())

    @property
    def samples(self) -> int:
        """Number of samples counted."""
        return int(self.sizes.sum())

    @property
    def fraction(self) -> float:
        """Share of yes; 0 without a sample."""
        return int(self.hits.sum()) / max(self.samples, 1)

    def interval(self, n: int, confidence: float) -> Interval:
        """Two-sided interval of the share in a domain of n states."""
        if self.design == "grid":
            return self._of_grid(n, confidence)
        if len(self.hits) > 1:
            return replicate_interval(self.hits.tolist(), self.sizes.tolist(), confidence)
        return clopper_pearson(int(self.hits.sum()), self.samples, confidence)

    def _of_grid(self, n: int, confidence: float) -> Interval:
        per_state = round(self.samples ** (1 / n))
        if not self.samples or per_state**n != self.samples:
            return Interval(0.0, 1.0, confidence, "none: an incomplete grid says nothing of the rest of the domain")
        return grid_interval(np.concatenate(self._answers).reshape((per_state,) * n), confidence)
