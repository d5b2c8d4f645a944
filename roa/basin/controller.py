"""The digital controller beside the independent integrator, written apart from the one in the lanes.

It keeps the commands that wait in a queue with the times at which they act, and knows nothing of kinds of delay.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.loop.model import Loop
from roa.loop.sampled import SampledLoop

Array = NDArray[np.float64]

# Instants nearer to each other than this part of the period are one: k T + T and (k + 1) T differ by rounding.
ONE_INSTANT = 1e-9


@dataclass(frozen=True)
class Frozen:
    """The plant with its commands held: what happens between two instants."""

    sampled: SampledLoop
    u: Array

    def rhs(self, x: Array) -> Array:
        """f at the point x, float64 (n,)."""
        return self.sampled.rhs(x, self.u)

    def jacobian(self, x: Array) -> Array:
        """Slopes of f in x there, float64 (n, n)."""
        return self.sampled.jacobian(x, self.u)[:, : self.sampled.loop.n]


class Controller:
    """A controller that has taken its first sample at t = 0.

    Parameters
    ----------
    loop : Loop, with a hold
    rest : float64 (n,), the equilibrium, whose commands act until the first one does
    start : float64 (n,), the state at t = 0
    """

    def __init__(self, loop: Loop, rest: Array, start: Array) -> None:
        self._sampled = SampledLoop(loop)
        self._acting = self._sampled.command(rest)
        self._waiting: deque[tuple[float, Array]] = deque()
        self._samples = 0
        self.meet(0.0, start)

    @property
    def flow(self) -> Frozen:
        """The plant until the next instant."""
        return Frozen(self._sampled, self._acting)

    @property
    def next_instant(self) -> float:
        """s; when a sample is taken or a command begins to act, whichever is first."""
        sample = self._samples * self._sampled.hold.T
        return min(sample, self._waiting[0][0]) if self._waiting else sample

    def meet(self, time: float, x: Array) -> bool:
        """Do what is due at an instant with the state x, float64 (n,); say whether a sample was."""
        hold = self._sampled.hold
        due = time + ONE_INSTANT * hold.T
        is_sample = self._samples * hold.T <= due
        if is_sample:
            self._waiting.append((self._samples * hold.T + hold.tau, self._sampled.command(x)))
            self._samples += 1
        while self._waiting and self._waiting[0][0] <= due:
            self._acting = self._waiting.popleft()[1]
        return is_sample
