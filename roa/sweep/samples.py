"""The stored samples of a run, read slice by slice: the memory does not grow with their number."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.kernel.trajectories import Trajectories
from roa.sweep.header import Header

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Stretch:
    """Consecutive samples in one file: `read(offset, count)` gives them, counted from the stretch's own start."""

    first: int
    count: int
    read: Callable[[int, int], Trajectories]


class Samples:
    """Samples 0, …, n - 1 of a design with all that was found of them.

    Attributes
    ----------
    n : int, number of samples
    states, units : names and units, in the order of the columns
    attributes : dict, what the run says of itself (the attributes of `sweep.h5`)
    replicates, design : how the starts were drawn; sample i belongs to replicate i mod replicates
    wanted : number of samples that the sweep is to have
    partial : whether these are fewer
    bound : dict with `P` (n, n) or None, `level` and `equilibrium` (n,)
    """

    def __init__(self, header: Header, stretches: Sequence[Stretch]) -> None:
        self._stretches = list(stretches)
        self.n = sum(stretch.count for stretch in stretches)
        self.states = tuple(header.states)
        self.units = tuple(header.units)
        self.attributes: dict[str, Any] = {field.name: getattr(header, field.name) for field in fields(header)}
        self.replicates = header.replicates
        self.design = header.design
        self.wanted = header.samples
        self.partial = self.n < self.wanted
        self.bound: dict[str, Any] = {
            "P": None if header.P is None else np.array(header.P),
            "level": header.level,
            "equilibrium": np.array(header.equilibrium),
        }

    def __len__(self) -> int:
        return self.n

    def read(self, first: int, count: int) -> Trajectories:
        """Return samples first, …, first + count - 1.

        Raises
        ------
        IndexError
            There are no such samples.
        MachineError
            The store is damaged.
        """
        if first < 0 or count < 0 or first + count > self.n:
            raise IndexError(f"samples {first} to {first + count - 1} of {self.n}")
        pieces = []
        for stretch in self._stretches:
            low, high = max(first, stretch.first), min(first + count, stretch.first + stretch.count)
            if low < high:
                pieces.append(stretch.read(low - stretch.first, high - low))
        return _joined(pieces, len(self.states))

    def chunks(self, size: int = 2**20) -> Iterator[tuple[int, Trajectories]]:
        """Yield (first, samples first, …) until all were given, at most `size` at once."""
        for first in range(0, self.n, size):
            yield first, self.read(first, min(size, self.n - first))


def _joined(pieces: list[Trajectories], n: int) -> Trajectories:
    if len(pieces) == 1:
        return pieces[0]
    empty = Trajectories(
        initial=np.empty((0, n)),
        outcome=np.empty(0, np.uint8),
        time=np.empty(0),
        final=np.empty((0, n)),
        peak=np.empty((0, n)),
        steps=np.empty(0, np.int32),
        reason=np.empty(0, np.uint8),
    )
    columns = {
        field.name: np.concatenate([getattr(piece, field.name) for piece in [empty, *pieces]])
        for field in fields(Trajectories)
    }
    return Trajectories(**columns)
