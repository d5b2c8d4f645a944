"""Starts in portions: calls of about a second, since nothing interrupts one that runs, and on several threads.

A start's result does not depend on its neighbours, so the size of a portion may follow the clock.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields

import numpy as np
from numpy.typing import NDArray

from roa.kernel.trajectories import Trajectories

Array = NDArray[np.float64]
Run = Callable[[Array], Trajectories]

# What a kernel call should take, s.
CALL = 1.0
# Starts of the first call, before anything is known of their cost: a few seconds even if each runs into the step cap.
FIRST = 64
GROWTH = 4


class Portions:
    """Runs starts by calls of a bearable length; remembers from call to call how many starts that is.

    Parameters
    ----------
    run : float64 (m, n) -> Trajectories, such as `Lanes.run`
    """

    def __init__(self, run: Run, clock: Callable[[], float] = time.perf_counter) -> None:
        self._run = run
        self._clock = clock
        self._size = FIRST

    def all(self, initial: Array) -> Trajectories:
        """Integrate starts, float64 (m, n), to the last one."""
        return joined(list(self._pieces(initial)))

    def run(self, initial: Array, given_up: Callable[[], bool]) -> Trajectories | None:
        """Integrate starts, float64 (m, n); None where `given_up` became true before the last call."""
        pieces, done = [], 0
        for piece in self._pieces(initial):
            pieces.append(piece)
            done += len(piece)
            if done < len(initial) and given_up():
                return None
        return joined(pieces)

    def _pieces(self, initial: Array) -> Iterator[Trajectories]:
        first = 0
        while first < max(len(initial), 1):
            piece = initial[first : first + self._size]
            begun = self._clock()
            result = self._run(piece)
            self._learn(len(piece), self._clock() - begun)
            yield result
            first += max(len(piece), 1)

    def _learn(self, count: int, seconds: float) -> None:
        fitting = count * CALL / max(seconds, 1e-9)
        self._size = max(int(min(fitting, GROWTH * self._size)), FIRST)


def side_by_side(run: Run, jobs: int) -> Run:
    """Return `run` on so many threads: the starts are dealt out in equal slices, the results put in their order."""
    if jobs == 1:
        return run

    def spread(initial: Array) -> Trajectories:
        slices = [part for part in np.array_split(initial, jobs) if len(part)]
        if len(slices) < 2:
            return run(initial)
        with ThreadPoolExecutor(jobs) as threads:
            return joined(list(threads.map(run, slices)))

    return spread


def joined(pieces: Sequence[Trajectories]) -> Trajectories:
    """Return results one after the other."""
    if len(pieces) == 1:
        return pieces[0]
    names = [field.name for field in fields(Trajectories)]
    return Trajectories(**{name: np.concatenate([getattr(piece, name) for piece in pieces]) for name in names})
