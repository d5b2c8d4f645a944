"""A bound as it is stated to others: V, level, and on what evidence."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import FormulaV, LyapunovFunction

OUTER = "no-return set"  # the one bound that says what does not converge
SEEN_THROUGH = 24  # points on the line from the equilibrium


class Strength(StrEnum):
    """The strength of evidence behind a number; every printed, stored or drawn number has one."""

    PROVED = "proved"
    SUPPORTED = "supported"
    SIMULATED = "simulated"
    ESTIMATED = "estimated"


@dataclass(frozen=True)
class Bound:
    """The set {V <= level}, said to lie in the basin, or (with `inner`) to lead into {V <= inner}.

    Attributes
    ----------
    name : one of "norm bound", "contact level", "unfalsified level", "ultimate bound", "best ring"
    V : LyapunovFunction
    level : float, 0.0 where no level above zero was found
    strength : Strength
    note : str, one sentence that says what limits the level or on what it stands
    contact : float64 (n,), state units: the point that limits the level, where one is known
    level_estimated : where less could be proved than was found by floating-point search: what that found
    inner : of an ultimate bound: every trajectory from {V <= level} enters {V <= inner}, for good; no more is said
    """

    name: str
    V: LyapunovFunction
    level: float
    strength: Strength
    note: str = ""
    contact: NDArray[np.float64] | None = None
    level_estimated: float | None = None
    inner: float | None = None

    def holds(self, x: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Which of the points x, float64 (m, n), are in the set, bool (m,).

        Of a formula only the part counts that the equilibrium sees along straight lines: {V <= level} may have others,
        of which nothing is said. The no-return set is told by the level alone.
        """
        inside = np.asarray(self.V.value(x) <= self.level)
        if self.name == OUTER or not isinstance(self.V, FormulaV):
            return inside
        centre = self.V.centre
        for share in np.linspace(0.0, 1.0, SEEN_THROUGH + 2)[1:-1]:
            rows = np.flatnonzero(inside)
            inside[rows] = self.V.value(centre + share * (x[rows] - centre)) <= self.level
        return inside
