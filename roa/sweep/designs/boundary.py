"""Cells at the edge of the basin refined in rounds: for basins of any shape, at a cost that grows with the edge.

The domain is cut into equal cells, and one start is drawn in each, uniformly. A cell that differs from a neighbour
lies at the edge; it is cut into 2^n equal cells, each with a start of its own, and so on, the largest first. Beside
them starts are drawn all over the domain: one that contradicts the cell it falls into has found what was not seen,
and its cell is refined as well; how often that happens says how much may be unseen.

Every cell, once refined, is represented by fresh starts drawn uniformly in its parts, so that the share of the
refined region is estimated without bias.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.errors import UserError
from roa.sweep.designs import Answers, Rounds

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

# Cells of the first round, at most: what is smaller than one of them is found by the starts all over the domain.
COARSE = 1024
# Starts all over the domain for each start in a refined cell.
LOOKING = 1 / 4
# With more states a cell has too many parts, and too many neighbours to look at those over corner.
MOST_STATES, MOST_STATES_OVER_CORNER = 8, 3
# A cell is numbered by so many bits.
KEY_BITS = 62
STREAM = 4


class Boundary:
    """Cells at the edge refined in rounds; a larger number of starts carries the refinement on."""

    in_rounds = True
    extendable = True
    interval = "cells at the edge, and what starts all over the domain may have missed"

    def __init__(self, box: Array, seed: int, replicates: int, samples: int, centre: Array) -> None:
        self.box, self.seed, self.samples = box, seed, samples
        self.replicates = 1
        self.n = len(box)
        if self.n > MOST_STATES:
            raise UserError(
                f'[sweep] design = "boundary": is for at most {MOST_STATES} states, {self.n} found; use "sobol"'
            )
        self.per_state = 2
        while (self.per_state + 1) ** self.n <= COARSE:
            self.per_state += 1
        self.coarse = self.per_state**self.n
        if samples < 2 * self.coarse:
            raise UserError(
                f'[sweep] samples = {samples}: design = "boundary" needs at least {2 * self.coarse:,} starts for '
                f'{self.n} states; ask for more, or use design = "sobol"'
            )
        self.deepest = 0
        while (self.per_state * 2 ** (self.deepest + 1)) ** self.n < 2**KEY_BITS and self.deepest < 40:
            self.deepest += 1
        self.parts: dict[str, Any] = {"coarse": self.per_state, "looking": LOOKING}

    def stream(self, number: int) -> np.random.Generator:
        """Random numbers of one round."""
        return np.random.default_rng(np.random.SeedSequence(self.seed, spawn_key=(STREAM, number)))

    def in_cells(self, level: int, coordinates: Ints, rng: np.random.Generator) -> Array:
        """A start in each cell, int (k, n), uniformly: float64 (k, n), state units."""
        unit = (coordinates + rng.random(coordinates.shape)) / (self.per_state * 2**level)
        return self._from_unit(unit)

    def anywhere(self, count: int, rng: np.random.Generator) -> Array:
        """Starts all over the domain, uniformly: float64 (count, n), state units."""
        return self._from_unit(rng.random((count, self.n)))

    def cells_of(self, level: int, starts: Array) -> Ints:
        """The cells of a level in which starts lie, int (k, n)."""
        cells = self.per_state * 2**level
        unit = (starts - self.box[:, 0]) / (self.box[:, 1] - self.box[:, 0])
        return np.asarray(np.clip(np.floor(unit * cells).astype(np.int64), 0, cells - 1))

    def _from_unit(self, unit: Array) -> Array:
        low, high = self.box.T
        return np.asarray(np.clip(low + unit * (high - low), low, high))

    def course(self) -> BoundaryCourse:
        """Return a new passage from the first round on."""
        return BoundaryCourse(self)


@dataclass(frozen=True)
class Look:
    """One round's starts all over the domain: how many, and how many of them contradict a cell that seemed settled.

    Attributes
    ----------
    starts : int
    falsely_in, falsely_out : contradictions of cells that count as in the basin, and as out of it
    """

    starts: int
    falsely_in: int
    falsely_out: int


class BoundaryCourse:
    """One passage through the rounds.

    Attributes
    ----------
    levels : cells by level, the coarsest first
    looks : of each round
    """

    def __init__(self, design: Boundary) -> None:
        self._design = design
        self._used = 0
        self.levels: list[Level] = []
        self.looks: list[Look] = []

    def rounds(self) -> Rounds:
        """Yield the starts of one round after the other; see the text of the module."""
        design = self._design
        cells = np.array(list(np.ndindex(*(design.per_state,) * design.n)), np.int64)
        starts = design.in_cells(0, cells, design.stream(0))
        self._used = len(starts)
        answers = yield starts
        self._add(0, cells, answers)
        number = 0
        while self._used < design.samples:
            number += 1
            rng = design.stream(number)
            level, parents = self._largest_at_the_edge()
            if not len(parents):
                starts = design.anywhere(min(self._used, design.samples - self._used), rng)
                self._used += len(starts)
                self._look(starts, (yield starts))
                continue
            # Of each cell first what looks all over the domain, then its parts: the last round may end anywhere.
            children = _children(parents)
            looking = max(round(LOOKING * 2**design.n), 1)
            of_all = np.concatenate(
                [
                    design.anywhere(looking * len(parents), rng).reshape(len(parents), -1, design.n),
                    design.in_cells(level + 1, children, rng).reshape(len(parents), -1, design.n),
                ],
                axis=1,
            )
            size = of_all.shape[1]
            starts = of_all.reshape(-1, design.n)[: design.samples - self._used]
            self._used += len(starts)
            answers = yield starts
            place = np.arange(len(starts)) % size
            self._look(starts[place < looking], answers[place < looking])
            whole = len(starts) // size
            refined = (place >= looking) & (np.arange(len(starts)) < whole * size)
            self.levels[level].split(parents[:whole])
            self._add(level + 1, children[: whole * 2**design.n], answers[refined])

    def leaves(self) -> Iterator[tuple[float, Flags, Flags]]:
        """Yield for each level the share of a cell, and of its cells not refined: in the basin, at the edge."""
        for depth, level in enumerate(self.levels):
            whole = ~level.is_split
            yield self._share(depth), level.value[whole], level.at_the_edge[whole]

    def _share(self, level: int) -> float:
        return float((self._design.per_state * 2**level) ** -float(self._design.n))

    def _largest_at_the_edge(self) -> tuple[int, Ints]:
        """The cells at the edge of the coarsest level that has any, int (k, n), and that level."""
        for depth, level in enumerate(self.levels[: self._design.deepest]):
            wanted = level.at_the_edge & ~level.is_split
            if wanted.any():
                return depth, level.coordinates[wanted]
        return 0, np.empty((0, self._design.n), np.int64)

    def _add(self, depth: int, cells: Ints, values: Answers) -> None:
        """Add cells with the answers of their starts, and mark what is at the edge because of them."""
        if depth == len(self.levels):
            self.levels.append(Level(self._design.per_state * 2**depth, self._design.n))
        self.levels[depth].add(cells, values)
        edge = np.zeros(len(cells), np.bool_)
        for offset in _offsets(self._design.n):
            beside = cells + offset
            there = np.flatnonzero(((beside >= 0) & (beside < self.levels[depth].per_state)).all(axis=1))
            edge[there] |= self._differs(depth, beside[there], values[there], offset)
        self.levels[depth].mark(cells[edge])

    def _differs(self, depth: int, beside: Ints, values: Answers, offset: Ints) -> Flags:
        """Which cells differ from what lies beside them, bool (k,); the neighbour is marked too."""
        differs = np.zeros(len(beside), np.bool_)
        left = np.arange(len(beside))
        for above in range(depth + 1):
            level = self.levels[depth - above]
            found, place = level.find(beside[left] >> above)
            here, place = left[found], place[found]
            other = level.value[place] != values[here]
            differs[here] |= other
            level.at_the_edge[place[other]] = True
            if above == 0 and depth + 1 < len(self.levels):  # smaller cells beside it were there before
                finer = here[level.is_split[place]]
                differs[finer] |= self._differs_from_parts(depth + 1, beside[finer], values[finer], offset)
            left = left[~found]
            if not len(left):
                break
        return differs

    def _differs_from_parts(self, depth: int, beside: Ints, values: Answers, offset: Ints) -> Flags:
        """Which values differ from those of the parts of a refined neighbour that touch, bool (k,)."""
        differs = np.zeros(len(beside), np.bool_)
        touching = [(0,) if along > 0 else (1,) if along < 0 else (0, 1) for along in offset]
        for part in product(*touching):
            level = self.levels[depth]
            found, place = level.find(2 * beside + np.array(part))
            differs[found] |= level.value[place[found]] != values[found]
        return differs

    def _look(self, starts: Array, answers: Answers) -> None:
        """Compare starts all over the domain with the cells in which they lie; mark the cells that they contradict."""
        falsely_in = falsely_out = 0
        left = np.arange(len(starts))
        for depth in reversed(range(len(self.levels))):
            level = self.levels[depth]
            found, place = level.find(self._design.cells_of(depth, starts[left]))
            here, place = left[found], place[found]
            contrary = level.value[place] != answers[here]
            settled = contrary & ~level.at_the_edge[place]
            falsely_in += int(np.sum(settled & level.value[place]))
            falsely_out += int(np.sum(settled & ~level.value[place]))
            level.at_the_edge[place[contrary]] = True
            left = left[~found]
        self.looks.append(Look(len(starts), falsely_in, falsely_out))


class Level:
    """The cells of one size, sorted by their number.

    Attributes
    ----------
    per_state : cells across the domain
    value : bool (k,), whether the start of each lies in the basin
    at_the_edge : bool (k,), whether each differs from a neighbour, or was contradicted
    is_split : bool (k,), whether each was refined
    """

    def __init__(self, per_state: int, n: int) -> None:
        self.per_state, self._n = per_state, n
        self._keys = np.empty(0, np.int64)
        self.value = self.at_the_edge = self.is_split = np.empty(0, np.bool_)

    @property
    def coordinates(self) -> Ints:
        """Coordinates of all cells, int (k, n)."""
        rest, columns = self._keys, []
        for _ in range(self._n):
            rest, column = np.divmod(rest, self.per_state)
            columns.append(column)
        return np.stack(columns, axis=1)

    def add(self, cells: Ints, values: Answers) -> None:
        """Add cells, int (k, n), that are not there yet."""
        keys = np.concatenate([self._keys, self._key(cells)])
        order = np.argsort(keys, kind="stable")
        none = np.zeros(len(cells), np.bool_)
        self._keys = keys[order]
        self.value = np.concatenate([self.value, values])[order]
        self.at_the_edge = np.concatenate([self.at_the_edge, none])[order]
        self.is_split = np.concatenate([self.is_split, none])[order]

    def find(self, cells: Ints) -> tuple[Flags, Ints]:
        """Which cells, int (k, n), are there, bool (k,), and the place of each, int (k,)."""
        if not len(self._keys):
            return np.zeros(len(cells), np.bool_), np.zeros(len(cells), np.int64)
        keys = self._key(cells)
        place = np.minimum(np.searchsorted(self._keys, keys), len(self._keys) - 1)
        return np.asarray(self._keys[place] == keys), place

    def mark(self, cells: Ints) -> None:
        """Mark cells as lying at the edge."""
        self.at_the_edge[self.find(cells)[1]] = True

    def split(self, cells: Ints) -> None:
        """Mark cells as refined."""
        self.is_split[self.find(cells)[1]] = True

    def _key(self, cells: Ints) -> Ints:
        key = np.zeros(len(cells), np.int64)
        for column in reversed(range(self._n)):
            key = key * self.per_state + cells[:, column]
        return key


def _children(parents: Ints) -> Ints:
    """The 2^n parts of each cell, one after the other, int (k, n)."""
    n = parents.shape[1]
    parts = np.array(list(product((0, 1), repeat=n)), np.int64)
    return np.asarray((2 * parents[:, None, :] + parts).reshape(-1, n))


def _offsets(n: int) -> list[Ints]:
    """To the neighbours of a cell: over faces, and with few states over corners too."""
    if n <= MOST_STATES_OVER_CORNER:
        return [np.array(offset) for offset in product((-1, 0, 1), repeat=n) if any(offset)]
    return [sign * axis for axis in np.eye(n, dtype=np.int64) for sign in (1, -1)]
