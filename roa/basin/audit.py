"""Stored starts integrated once more, independently and at tight tolerance: some at random, some near the edge."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from roa.basin.independent import decide
from roa.basin.intervals import clopper_pearson_upper
from roa.basin.near_edge import distance_to_the_edge
from roa.basin.replay import Replay
from roa.bound.statement import Strength
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.loop.model import Loop
from roa.sweep.samples import Samples

# Tolerances of the sweep are divided by this, but not beyond what floats resolve.
TIGHTER, SMALLEST_RTOL, SMALLEST_ATOL = 100.0, 1e-12, 1e-14
# Stored starts among which those near the edge are looked for.
AMONG = 2**16
# Part that is drawn at random; the rest lies near the edge.
AT_RANDOM = 0.5
# What a report carries without being asked.
BY_DEFAULT = 16
STREAM = (1, 7)


@dataclass(frozen=True)
class Audit:
    """What the second integrations found.

    Attributes
    ----------
    at_random, near : Replay of each start, drawn by its index and near the edge
    confidence : of the bound
    """

    at_random: tuple[Replay, ...]
    near: tuple[Replay, ...]
    confidence: float

    @property
    def disagreements(self) -> tuple[Replay, ...]:
        """Those whose outcomes differ."""
        return tuple(one for one in (*self.at_random, *self.near) if not one.agrees)

    @property
    def share_upper(self) -> float:
        """Upper limit of the share of stored starts whose outcome would differ, from those drawn at random alone."""
        differ = sum(not one.agrees for one in self.at_random)
        return clopper_pearson_upper(differ, len(self.at_random), self.confidence)

    @property
    def document(self) -> dict[str, Any]:
        """As plain values."""
        return {
            "at_random": len(self.at_random),
            "near_the_edge": len(self.near),
            "disagreements": [
                {"index": one.index, "stored": one.stored.word, "again": one.decision.outcome.word}
                for one in self.disagreements
            ],
            "disagreements_at_random": sum(not one.agrees for one in self.at_random),
            "share_upper": self.share_upper if self.at_random else None,
            "confidence": self.confidence,
            "strength": Strength.SUPPORTED if self.at_random else Strength.SIMULATED,
        }


def audit(
    samples: Samples, loop: Loop, target: Target, integration: Integration, count: int, seed: int, confidence: float
) -> Audit:
    """Integrate `count` (at least 1) stored starts again; the same ones for the same seed."""
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=STREAM))
    count = min(count, samples.n)
    at_random = np.sort(rng.choice(samples.n, size=max(round(AT_RANDOM * count), 1), replace=False))
    first = int(rng.integers(max(samples.n - AMONG, 0) + 1))
    stretch = samples.read(first, min(AMONG, samples.n - first))
    distance = distance_to_the_edge(stretch, loop)
    nearest = np.argsort(distance, kind="stable")[: count - len(at_random)]
    near = first + nearest[np.isfinite(distance[nearest])]
    rtol = max(integration.rtol / TIGHTER, SMALLEST_RTOL)
    atol = max(integration.atol / TIGHTER, SMALLEST_ATOL)

    def again(index: int) -> Replay:
        row = samples.read(index, 1)
        decision = decide(loop, target, integration, row.initial[0], rtol, atol)
        return Replay(index, row.initial[0], Outcome(int(row.outcome[0])), float(row.time[0]), decision, rtol, atol)

    return Audit(tuple(again(int(i)) for i in at_random), tuple(again(int(i)) for i in near), confidence)
