"""The simulation of any block of a sweep: all that a worker needs, in this process or in another."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.model import Loop
from roa.sweep.block import Block
from roa.sweep.kept import KEPT, completed
from roa.sweep.plan import Plan
from roa.sweep.portions import Portions
from roa.sweep.rounds import Drawn


class Runs(Protocol):
    """What turns starts into results: the kernel's `Lanes`."""

    def run(self, initial: NDArray[np.float64]) -> Trajectories:
        """Integrate starts, float64 (m, n)."""
        ...


class Simulation:
    """A block's results, a pure function of the plan and the block.

    It can be sent to another process, which compiles the lanes for its own processor, once.

    Attributes
    ----------
    fingerprint : of the plan
    drawn : what draws the starts of the present round
    """

    def __init__(self, plan: Plan, lanes: Runs, drawn: Drawn) -> None:
        self.fingerprint = plan.fingerprint
        self._loop: Loop = plan.configuration.loop
        self._target: Target = plan.target
        self._integration: Integration = plan.integration
        self._kept = plan.configuration.sweep.store
        self.drawn = drawn
        self._begin(lanes)

    def _begin(self, lanes: Runs | None) -> None:
        self._compiling = threading.Lock()
        self._portions = None if lanes is None else Portions(lanes.run)

    def __getstate__(self) -> dict[str, Any]:
        return {key: value for key, value in self.__dict__.items() if key not in ("_compiling", "_portions")}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._begin(None)

    def elsewhere(self, block: Block) -> dict[str, NDArray[Any]]:
        """Run a block outside this process; return what has to come back: not the starts, nor what is not kept."""
        rows = self(block)
        assert rows is not None
        return {name: getattr(rows, name) for name in KEPT[self._kept] if name != "initial"}

    def received(self, block: Block, columns: Mapping[str, NDArray[Any]]) -> Trajectories:
        """Return the rows of a block from what came back."""
        return completed(columns, lambda: self.drawn.points(block.first, block.count))

    def __call__(self, block: Block, given_up: Callable[[], bool] = lambda: False) -> Trajectories | None:
        """Run a block; None where `given_up` became true before its end."""
        with self._compiling:
            if self._portions is None:
                self._portions = Portions(compile_lanes(self._loop, self._target, self._integration).run)
        return self._portions.run(self.drawn.points(block.first, block.count), given_up)
