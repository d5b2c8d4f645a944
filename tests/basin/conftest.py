"""Sweeps and lanes in memory, for loops whose basins are known."""

from dataclasses import dataclass, fields

import numpy as np
import pytest

from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.sweep.designs import load


@dataclass
class SamplesInMemory:
    """What the basin room asks of a stored sweep."""

    trajectories: Trajectories
    design: str
    replicates: int
    missing: int = 0

    @property
    def n(self):
        return len(self.trajectories)

    @property
    def wanted(self):
        return self.n + self.missing

    def read(self, first, count):
        columns = {f.name: getattr(self.trajectories, f.name)[first : first + count] for f in fields(Trajectories)}
        return Trajectories(**columns)

    def chunks(self, size=10_000):
        for first in range(0, self.n, size):
            yield first, self.read(first, min(size, self.n - first))


def trajectories_of(starts, outcomes, time=1.0):
    m, n = starts.shape
    return Trajectories(
        initial=starts,
        outcome=np.asarray(outcomes, np.uint8),
        time=np.broadcast_to(np.asarray(time, float), (m,)).copy(),
        final=np.zeros((m, n)),
        peak=np.abs(starts),
        steps=np.ones(m, np.int32),
        reason=np.zeros(m, np.uint8),
    )


@pytest.fixture
def sweep():
    """Return a function that sweeps a loop with an exact rule: starts, float64 (m, n) -> outcomes (m,)."""

    def swept(loop, rule, samples=16384, design="sobol", seed=11, replicates=16):
        drawn = load(design)(loop.box, seed, replicates, samples)
        starts = drawn.points(0, drawn.samples)
        return SamplesInMemory(trajectories_of(starts, rule(starts)), design, drawn.replicates)

    return swept


@pytest.fixture
def inside():
    """Return a function that makes a rule: converged where the condition holds, else escaped."""
    return lambda condition: lambda x: np.where(condition(x), Outcome.CONVERGED, Outcome.ESCAPED)
