"""How many stored outcomes hang on the integrator's tolerance: starts run again at one ten times tighter.

Every start of a prefix of the sweep is run again, not a choice of doubtful ones: no margin that a trajectory shows
on its way bounds how far a boundary moves with the tolerance, and a fractal boundary has starts of every margin.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import clopper_pearson_upper
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.sweep.samples import Samples

TIGHTER = 10.0
# Starts that are run again at most: some seconds for most loops, and enough for a share of 1e-4.
MOST = 65_536
CHUNK = 16_384


@dataclass(frozen=True)
class Sensitivity:
    """Starts whose outcome a tolerance ten times tighter changes; *simulated*.

    Attributes
    ----------
    tried : starts that were run again, the first ones of the sweep
    changed : those that ended with another outcome
    changes : "outcome -> outcome" -> how many
    first : index of the first of them, None where there is none
    upper : one-sided exact binomial limit of their share, as for independent starts
    """

    tried: int
    changed: int
    changes: Mapping[str, int]
    first: int | None
    upper: float


def sensitivity(
    samples: Samples, tighter: Callable[[NDArray[np.float64]], Trajectories], confidence: float, most: int = MOST
) -> Sensitivity:
    """Run the first starts of a sweep again.

    Parameters
    ----------
    tighter : the lanes at the tighter tolerance, starts float64 (m, n) -> Trajectories
    confidence : of the upper limit
    """
    tried = min(samples.n, most)
    pairs = np.zeros((len(Outcome), len(Outcome)), dtype=np.int64)
    earliest = None
    for first in range(0, tried, CHUNK):
        stored = samples.read(first, min(CHUNK, tried - first))
        again = tighter(stored.initial).outcome
        np.add.at(pairs, (stored.outcome, again), 1)
        differ = np.flatnonzero(stored.outcome != again)
        if earliest is None and len(differ):
            earliest = first + int(differ[0])
    np.fill_diagonal(pairs, 0)
    changes = {
        f"{Outcome(int(old)).word} -> {Outcome(int(new)).word}": int(pairs[old, new])
        for old, new in zip(*np.nonzero(pairs), strict=True)
    }
    changed = int(pairs.sum())
    return Sensitivity(tried, changed, changes, earliest, clopper_pearson_upper(changed, max(tried, 1), confidence))
