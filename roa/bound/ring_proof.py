"""Proof of an ultimate bound: V̇ < 0 on the ring c_in <= V <= c_out, whatever the disturbance does in its interval.

{V <= c_out} is closed inside the domain and V̇ has a negative maximum on the ring, which is compact: every trajectory
from {V <= c_out} enters {V <= c_in} within a bounded time and never leaves it again. Inside, the dynamics must be
defined and bounded, and nothing is asked of V: the loop may come to rest anywhere there, or nowhere. The disturbances
are further sides of the boxes.
Source: Khalil, Nonlinear Systems, 3rd ed. 2002, section 4.8 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from decimal import Decimal
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.level_chart import LevelChart, level_chart
from roa.bound.lyapunov_function import LyapunovFunction
from roa.bound.ring_levels import find_rise
from roa.kernel.branch_and_bound import Answer, Search, negative_on_levels
from roa.kernel.tape import Program, Tape, enclose_number
from roa.loop.derivative import NotSmooth

Array = NDArray[np.float64]
Level = Decimal | Fraction | float

BOUNDED = 1e100  # what the square of the dynamics must stay below within the inner level set


@dataclass(frozen=True)
class RingProof:
    """What came of an attempt.

    Attributes
    ----------
    answer : Answer of "V̇ < 0 on {inner <= V <= outer} for every disturbance, and {V <= outer} is inside the domain"
    boxes : int, that were looked at
    left : share of the box about the set, and of the disturbances, that was not decided
    witness : float64 (n,), state units: next to it V̇ >= 0 within the ring; where refuted
    disturbance : float64 (m,): under which disturbance that is
    reason : why nothing is decided; empty otherwise
    exact_centre : whether V is about a float point that is not proved to be an equilibrium
    """

    answer: Answer
    boxes: int = 0
    left: float = 1.0
    witness: Array | None = None
    disturbance: Array | None = None
    reason: str = ""
    exact_centre: bool = False


class RingProver:
    """Proofs about rings of one V.

    Parameters
    ----------
    V : LyapunovFunction
    """

    def __init__(self, V: LyapunovFunction) -> None:
        self._V = V
        self._disturbances = V.loop.disturbances

    def prove(self, inner: Level, outer: Level, budget: int) -> RingProof:
        """Try to prove a ring, its levels given exactly, with at most `budget` boxes."""
        if self._V.loop.hold is not None:
            return _undecided("V̇ says nothing of a loop with a hold, whose commands lag behind")
        if self._V.loop.limits:
            return _undecided("that the set keeps within the limits is not looked at for a ring")
        c_in, c_out = enclose_number(inner)[0], enclose_number(outer)[1]
        if not 0 < c_in <= c_out < np.inf:
            return _undecided("the levels are not positive numbers in this order")
        coordinates = level_chart(self._V, c_out)
        if isinstance(coordinates, str):
            return _undecided(coordinates)
        try:
            program = self._program(coordinates)
        except NotSmooth:
            return _undecided("V has kinks")
        m = len(self._disturbances)
        low, high = (np.concatenate([ends, share]) for ends, share in
                     ((coordinates.low, np.zeros(m)), (coordinates.high, np.ones(m))))  # fmt: skip
        found = negative_on_levels(program, low, high, (c_in, c_out), np.full(len(low), -1.0), budget)
        if found.answer is Answer.UNDECIDED:
            found = self._rise(coordinates, program, (c_in, c_out), found)
        if found.answer is Answer.PROVED and not self._is_defined(coordinates, c_in, low, high, budget):
            return _undecided("the dynamics are not shown to be defined and bounded all over the inner level set")
        reason = ""
        if found.answer is Answer.UNDECIDED:
            reason = f"the budget of {budget} boxes was used up" if found.boxes >= budget else "boxes became too small"
        n = self._V.loop.n
        witness = None if found.witness is None else coordinates.state(found.witness[:n])
        disturbance = None if found.witness is None else self._value_of(found.witness[n:])
        return RingProof(found.answer, found.boxes, found.left, witness, disturbance, reason, coordinates.exact_centre)

    def _rise(self, coordinates: LevelChart, program: Program, levels: tuple[float, float], found: Search) -> Search:
        """Look for a point with V̇ >= 0 by floats, which a search by boxes may miss, and verify it by intervals."""
        suspect = find_rise(self._V, *levels)
        if suspect is None:
            return found
        x, disturbance = suspect
        ends = np.array([[float(low), float(high)] for low, high in self._disturbances.values()]).reshape(-1, 2)
        shares = (disturbance - ends[:, 0]) / (ends[:, 1] - ends[:, 0])
        z = np.linalg.solve(coordinates.T, x - coordinates.centre.middle)
        point = np.concatenate([z, np.clip(shares, 0, 1)])
        verified = negative_on_levels(program, point, point, levels, np.full(len(point), -1.0), 1)
        return replace(verified, boxes=found.boxes + 1) if verified.answer is Answer.REFUTED else found

    def budget(self, level: float, work: float, most: int) -> int:
        """Boxes that so many elementary operations pay for, at most `most`."""
        coordinates = level_chart(self._V, level)
        if isinstance(coordinates, str):
            return most
        try:
            program = self._program(coordinates)
        except NotSmooth:
            return most
        sides = program.support.shape[1]
        return min(most, int(work / (len(program.ops) * (1 + sides) * (2 + sides))))

    def _is_defined(self, coordinates: LevelChart, c_in: float, low: Array, high: Array, budget: int) -> bool:
        """Whether trajectories that have entered {V <= c_in} go on for ever: where f has a pole they would end."""
        tape, names = self._begun(coordinates)
        dynamics = [tape.expression(tree, names) for tree in coordinates.loop.dynamics]
        squares = tape.total(tape.multiply(row, row) for row in dynamics)
        value, _ = coordinates.value_and_decrease(tape, names)
        # A pole is never below a number, however large.
        program = tape.program([tape.subtract(squares, tape.number(BOUNDED)), value])
        nowhere = np.full(len(low), -1.0)
        return negative_on_levels(program, low, high, (-np.inf, c_in), nowhere, budget).answer is Answer.PROVED

    def _program(self, coordinates: LevelChart) -> Program:
        """Tape of V̇ and V in z and in the shares of the disturbances' intervals."""
        tape, names = self._begun(coordinates)
        value, decrease = coordinates.value_and_decrease(tape, names)
        return tape.program([decrease, value])

    def _begun(self, coordinates: LevelChart) -> tuple[Tape, dict[str, int]]:
        """A tape with the rows of the loop's names."""
        n = coordinates.loop.n
        tape = Tape(n + len(self._disturbances))
        varying = {}
        for k, (name, (low, high)) in enumerate(self._disturbances.items()):
            width = tape.multiply(tape.number(Fraction(high) - Fraction(low)), tape.variable(n + k))
            varying[name] = tape.add(tape.number(low), width)
        return tape, tape.loop(coordinates.loop, coordinates.states(tape), varying)

    def _value_of(self, shares: Array) -> Array:
        ends = np.array([[float(low), float(high)] for low, high in self._disturbances.values()]).reshape(-1, 2)
        return np.asarray(ends[:, 0] + shares * (ends[:, 1] - ends[:, 0]))


def _undecided(reason: str) -> RingProof:
    return RingProof(Answer.UNDECIDED, reason=reason)
