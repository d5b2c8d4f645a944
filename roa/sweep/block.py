"""Blocks: the unit of work of a sweep, a fixed slice of the design."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from roa.kernel.trajectories import Trajectories


@dataclass(frozen=True)
class Block:
    """Starts first, …, stop - 1 of a design; block number `index` of the sweep."""

    index: int
    first: int
    count: int

    @property
    def stop(self) -> int:
        """Index after the last start."""
        return self.first + self.count

    @property
    def file_name(self) -> str:
        """Name of the block's file; sorts in the order of the blocks."""
        return f"block-{self.index:09d}.h5"

    def __str__(self) -> str:
        return f"block {self.index} (starts {self.first} to {self.stop - 1})"


class Runs(Protocol):
    """What turns starts into results: the kernel's `Lanes`."""

    def run(self, initial: NDArray[np.float64]) -> Trajectories:
        """Integrate starts, float64 (m, n)."""
        ...


class Drawn(Protocol):
    """What gives an index its start: a design that knows all its starts, or the starts of one round."""

    def points(self, first: int, count: int) -> NDArray[np.float64]:
        """Return starts first, …, first + count - 1, float64 (count, n), state units."""
        ...


def blocks_of(samples: int, size: int) -> Iterator[Block]:
    """Yield the blocks of a sweep: `size` starts each, the last one what is left."""
    for index, first in enumerate(range(0, samples, size)):
        yield Block(index, first, min(size, samples - first))


def simulate(block: Block, drawn: Drawn, lanes: Runs) -> Trajectories:
    """Return the block's results, a pure function of the plan and the block."""
    return lanes.run(drawn.points(block.first, block.count))
