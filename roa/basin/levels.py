"""The sweep seen along V: the share of converged starts in each shell, and the lowest start that does not converge."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import Interval, clopper_pearson
from roa.basin.tally import in_rounds
from roa.bound.lyapunov_function import LyapunovFunction
from roa.bound.statement import Bound, Strength
from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# Shells hold an equal number of samples, 1/40 of the sweep; the innermost is halved again and again, down to
# shells of this many samples, because small bounds of loops with many states lie in it altogether.
SHELLS = 40
FEWEST_SAMPLES = 64


@dataclass(frozen=True)
class Shell:
    """The samples with low <= V < high (the last shell has no upper end but its largest V).

    `interval` is the exact binomial one of the converged share, as for independent samples.
    """

    low: float
    high: float
    samples: int
    converged: int
    interval: Interval


@dataclass(frozen=True)
class Unfalsified:
    """The unfalsified level: the lowest V among the samples that do not converge, with its start and index."""

    level: float
    start: Array
    index: int


@dataclass(frozen=True)
class Levels:
    """Shells of V from the equilibrium outward, and the unfalsified level (None where every sample converges)."""

    V: LyapunovFunction
    shells: tuple[Shell, ...]
    unfalsified: Unfalsified | None

    @property
    def bound(self) -> Bound | None:
        """The unfalsified level as a bound: what no sample refutes, and the next one may."""
        if self.unfalsified is None:
            return None
        note = f"Sample {self.unfalsified.index} lies on this level and does not converge."
        return Bound("unfalsified level", self.V, self.unfalsified.level, Strength.SIMULATED, note)


def by_level(samples: Samples, V: LyapunovFunction, confidence: float) -> Levels:
    """Sort the samples by V in one pass; samples without a finite V are left out.

    There are no shells of a design in rounds, whose starts are not spread evenly.
    """
    edges: Array | None = None
    counts = converged = np.zeros(0, dtype=np.int64)
    highest = -np.inf
    lowest: Unfalsified | None = None
    uneven = in_rounds(samples)
    for first, trajectories in samples.chunks():
        V_start, yes = V.value(trajectories.initial), trajectories.in_basin
        lowest = _lower(lowest, first, V_start, yes, trajectories.initial)
        if uneven:  # the share of such starts is none of the shell
            continue
        finite = np.isfinite(V_start)
        V_start, yes = V_start[finite], yes[finite]
        if not len(V_start):
            continue
        if edges is None:
            edges = _edges(V_start)
            counts, converged = np.zeros((2, len(edges) - 1), dtype=np.int64)
        highest = max(highest, float(V_start.max()))
        shell = np.clip(np.searchsorted(edges, V_start, side="right") - 1, 0, len(counts) - 1)
        counts += np.bincount(shell, minlength=len(counts))
        converged += np.bincount(shell[yes], minlength=len(counts))
    if edges is None:
        return Levels(V, (), lowest)
    edges[-1] = max(edges[-1], highest)
    shells = [
        Shell(float(low), float(high), int(n), int(k), clopper_pearson(int(k), int(n), confidence))
        for low, high, n, k in zip(edges[:-1], edges[1:], counts, converged, strict=True)
    ]
    return Levels(V, tuple(shells), lowest)


def _lower(
    lowest: Unfalsified | None, first: int, V_start: Array, yes: NDArray[np.bool_], initial: Array
) -> Unfalsified | None:
    """Return the lower one of what is known and the lowest start of a slice that does not converge."""
    against = np.where(yes | np.isnan(V_start), np.inf, V_start)
    i = int(np.argmin(against))
    if against[i] < (np.inf if lowest is None else lowest.level):
        return Unfalsified(float(against[i]), initial[i].copy(), first + i)
    return lowest


def _edges(V_start: Array) -> Array:
    """Shells of about equal counts, by the first slice: that of a scrambled design covers the whole domain."""
    parts = list(np.arange(SHELLS + 1) / SHELLS)
    while parts[1] / 2 * len(V_start) >= FEWEST_SAMPLES:
        parts.insert(1, parts[1] / 2)
    edges = np.quantile(V_start, parts)
    edges[0] = min(0.0, edges[0])
    return np.unique(edges) if edges[0] < edges[-1] else np.array([edges[0], edges[0] + 1.0])
