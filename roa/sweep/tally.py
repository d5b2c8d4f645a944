"""Outcomes counted by replicate: what a share and its interval are made of while a sweep is under way."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome


class Tally:
    """Counts of outcomes; sample i belongs to replicate i mod `replicates`.

    Attributes
    ----------
    counts : int64 (outcomes, replicates), by the value of the outcome
    """

    def __init__(self, replicates: int) -> None:
        self.counts: NDArray[np.int64] = np.zeros((len(Outcome), max(replicates, 1)), np.int64)

    def add(self, first: int, outcome: NDArray[np.uint8]) -> None:
        """Count samples first, first + 1, …, uint8 (m,)."""
        kinds, replicates = self.counts.shape
        place = outcome.astype(np.int64) * replicates + (first + np.arange(len(outcome))) % replicates
        self.counts += np.bincount(place, minlength=kinds * replicates).reshape(kinds, replicates)

    @property
    def total(self) -> int:
        """Number of samples counted."""
        return int(self.counts.sum())

    def by_word(self) -> dict[str, list[int]]:
        """Return the counts of each outcome by replicate, every outcome but *absent* listed."""
        return {outcome.word: self.counts[outcome].tolist() for outcome in Outcome if outcome is not Outcome.ABSENT}
