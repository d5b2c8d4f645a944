"""What is kept of many trajectories: a few numbers each, as arrays in the order of the starts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.kernel.outcomes import IN_BASIN


@dataclass(frozen=True)
class Trajectories:
    """Results of m initial conditions.

    Attributes
    ----------
    initial : float64 (m, n), state units
    outcome : uint8 (m,), values of `Outcome`
    time : float64 (m,), s to the decision
    final : float64 (m, n), state at that time
    peak : float64 (m, n), largest |x - equilibrium| per state up to that time
    steps : int32 (m,), accepted steps up to that time
    reason : uint8 (m,), values of `Reason`
    """

    initial: NDArray[np.float64]
    outcome: NDArray[np.uint8]
    time: NDArray[np.float64]
    final: NDArray[np.float64]
    peak: NDArray[np.float64]
    steps: NDArray[np.int32]
    reason: NDArray[np.uint8]

    def __len__(self) -> int:
        return len(self.outcome)

    @property
    def in_basin(self) -> NDArray[np.bool_]:
        """Which of them start in the basin, bool (m,)."""
        return np.isin(self.outcome, IN_BASIN)
