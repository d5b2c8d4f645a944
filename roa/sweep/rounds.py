"""The rounds of a sweep: most sweeps are one; a design that refines, or a goal that is looked at, makes more.

What a round holds is a pure function of the plan and of the stored results of the rounds before it, so that a resumed
sweep comes to the same rounds again.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from roa.sweep.block import Block
from roa.sweep.designs import Answers, Rounds, following
from roa.sweep.plan import Plan

Array = NDArray[np.float64]


class Drawn(Protocol):
    """What gives an index its start: a design that knows all its starts, or the starts of one round."""

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units."""
        ...


@dataclass(frozen=True)
class Given:
    """Starts that an earlier round led to: those of index `first` and after, float64 (m, n)."""

    first: int
    starts: Array

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units."""
        return self.starts[first - self.first : first - self.first + count]


@dataclass(frozen=True)
class Round:
    """Blocks that may be run in any order, and what draws their starts."""

    blocks: tuple[Block, ...]
    drawn: Drawn

    @property
    def stop(self) -> int:
        """Index after the last start."""
        return self.blocks[-1].stop


class Course:
    """The way of a sweep through its rounds.

    Attributes
    ----------
    blocks : of all rounds so far, the present one included
    needs_answers : whether the next round depends on the answers of this one
    """

    def __init__(self, plan: Plan) -> None:
        self._plan = plan
        self._answers = np.empty(0, np.bool_)
        self.blocks: list[Block] = []
        self.needs_answers = plan.design.in_rounds or plan.enough is not None
        self._refining: Rounds | None = None
        self._stretches: Iterator[tuple[int, int]] = iter(())
        if plan.design.in_rounds:
            self._refining = plan.design.course().rounds()
        else:
            self._stretches = pairwise([0, *(look for look in plan.looks if look < plan.samples), plan.samples])

    def first(self) -> Round | None:
        """Return the first round."""
        if self._refining is not None:
            return self._given(next(self._refining, None))
        return self._stretch()

    def after(self, answers: Answers) -> Round | None:
        """Return the round after one with these answers, bool (m,); None where the sweep is done.

        A course that needs no answers is sent an empty array.
        """
        if self._plan.enough is not None:
            self._answers = np.concatenate([self._answers, answers])
            if self._plan.enough(self._answers):
                return None
        if self._refining is not None:
            return self._given(following(self._refining, answers))
        return self._stretch()

    def _given(self, starts: Array | None) -> Round | None:
        if starts is None:
            return None
        first = self.blocks[-1].stop if self.blocks else 0
        return self._round(first, first + len(starts), Given(first, starts))

    def _stretch(self) -> Round | None:
        for first, stop in self._stretches:
            assert not self._plan.design.in_rounds
            return self._round(first, stop, self._plan.design)
        return None

    def _round(self, first: int, stop: int, drawn: Drawn) -> Round:
        size, index = self._plan.block_size, len(self.blocks)
        blocks = tuple(
            Block(index + i, begin, min(size, stop - begin)) for i, begin in enumerate(range(first, stop, size))
        )
        self.blocks += blocks
        return Round(blocks, drawn)
