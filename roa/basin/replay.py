"""Integrate a stored initial condition again, independently and at ten times tighter tolerance."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.independent import Decision, decide
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.model import Loop
from roa.sweep.samples import Samples

Array = NDArray[np.float64]
Run = Callable[[Array], Trajectories]

TIGHTER = 10.0


@dataclass(frozen=True)
class Replay:
    """A stored outcome beside the one found again.

    Attributes
    ----------
    index : int, in the design; None for a start that is not of a sweep
    initial : float64 (n,), state units
    stored : Outcome
    stored_time : s
    decision : Decision
    rtol, atol : tolerances of the second integration
    """

    index: int | None
    initial: Array
    stored: Outcome
    stored_time: float
    decision: Decision
    rtol: float
    atol: float

    @property
    def agrees(self) -> bool:
        """Whether both integrations end with the same outcome."""
        return self.stored is self.decision.outcome


def replay(samples: Samples, index: int, loop: Loop, target: Target, integration: Integration) -> Replay:
    """Integrate the stored start `index` (0 <= index < number of samples) again."""
    return _again(index, samples.read(index, 1), loop, target, integration)


def replay_start(start: Array, run: Run, loop: Loop, target: Target, integration: Integration) -> Replay:
    """Integrate any start, float64 (n,), by the lanes and again."""
    return _again(None, run(start[None, :]), loop, target, integration)


def _again(index: int | None, row: Trajectories, loop: Loop, target: Target, integration: Integration) -> Replay:
    rtol, atol = integration.rtol / TIGHTER, integration.atol / TIGHTER
    decision = decide(loop, target, integration, row.initial[0], rtol, atol)
    return Replay(index, row.initial[0], Outcome(int(row.outcome[0])), float(row.time[0]), decision, rtol, atol)
