"""Blocks: the unit of work of a sweep, a fixed slice of the design."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass


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


def blocks_of(samples: int, size: int) -> Iterator[Block]:
    """Yield the blocks of a sweep: `size` starts each, the last one what is left."""
    for index, first in enumerate(range(0, samples, size)):
        yield Block(index, first, min(size, samples - first))
