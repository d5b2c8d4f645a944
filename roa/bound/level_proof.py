"""Proof that V̇ < 0 on {0 < V <= c}, a set closed inside the domain, so that it lies in the basin.

With x* the true equilibrium, enclosed, and y = x - x*, the search runs in whitened coordinates z, y = T z,
where V = z'(T'PT) z is nearly |z|^2 and V̇ nearly -z'Dz with D diagonal. T is a float matrix near the inverse
of a square root of P; it is taken as exact, whatever it is, so nothing of its making has to be trusted.

Near zero V and V̇ vanish together, and no box would ever tell them apart. There f(x* + Tz) = J̃ z with every row of J̃
in the hull of that row's (Clarke's) gradients on the way from x*, so V̇ = z'(MJ̃ + J̃'M')z with M = T'P; where
that interval matrix is negative definite over a cube, the cube is done. The rest is `branch_and_bound`.
Cubic loops of many states are first tried direction by direction (`radial_proof`).
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.bound.definite import largest_eigenvalue, smallest_eigenvalue
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, enclose_equilibrium
from roa.bound.lyapunov_function import Quadratic
from roa.bound.radial_proof import Radial, radial
from roa.kernel.branch_and_bound import Answer, negative_on_levels
from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape, enclose_number

Array = NDArray[np.float64]
Level = Decimal | Fraction | float

HALVINGS, REFINEMENTS = 45, 6  # of the cube about the equilibrium
RADIAL = 3  # states from which on the radius is eliminated, where that can be done


@dataclass(frozen=True)
class LevelProof:
    """What came of an attempt at a proof.

    Attributes
    ----------
    answer : Answer of "V̇ < 0 on {0 < V <= level}, and the set lies strictly inside the domain"
    boxes : int, that were looked at
    left : share of the box about the set that was not decided
    witness : float64 (n,), state units: next to it V̇ >= 0 within the level; where refuted
    reason : why nothing is decided; empty otherwise
    """

    answer: Answer
    boxes: int = 0
    left: float = 1.0
    witness: Array | None = None
    reason: str = ""


@dataclass(frozen=True)
class Side:
    """One end of a limit: `name` must stay below `end` where sign is 1, above it where sign is -1."""

    name: str
    end: Decimal
    sign: int


class LevelProver:
    """Proofs about the levels of one V.

    Parameters
    ----------
    V : Quadratic
    """

    def __init__(self, V: Quadratic) -> None:
        self._V = V
        self._n = V.loop.n

    def prove(self, level: Level, budget: int) -> LevelProof:
        """Try to prove a level, given exactly, with at most `budget` boxes; equal arguments give equal answers."""
        c = enclose_number(level)[1]
        if not self.is_ready:
            return _undecided("the equilibrium could not be enclosed, or V not be proved to be positive definite")
        if not 0 < c < np.inf:
            return _undecided("the level is no positive number")
        reach = float(np.nextafter(np.sqrt(np.nextafter(c / self._shape, np.inf)), np.inf))  # |z| <= reach on {V <= c}
        if not self._is_inside(reach):
            return _undecided("the level set is not proved to lie inside the domain")
        boxes = 0
        if self._radial is not None:
            by_direction = self._radial.prove(c, budget // 2)
            boxes = by_direction.boxes
            if by_direction.answer is Answer.PROVED:
                return LevelProof(Answer.PROVED, boxes, 0.0)
        cell = self._cell(reach)
        if cell == 0:
            return _undecided("V̇ < 0 could not be proved next to the equilibrium")
        cube = np.full(self._n, reach)
        left = max(budget - boxes, 0)
        found = negative_on_levels(self._program, -cube, cube, (0.0, c), np.full(self._n, cell), left)
        boxes += found.boxes
        if found.answer is Answer.UNDECIDED:
            reason = f"the budget of {budget} boxes was used up" if boxes >= budget else "boxes became too small"
            return LevelProof(found.answer, boxes, found.left, reason=reason)
        witness = None if found.witness is None else self._V.centre + self._T @ found.witness
        return LevelProof(found.answer, boxes, found.left, witness)

    def keeps(self, side: Side, level: Level, budget: int) -> Answer:
        """Try to prove that one end of a limit is not reached anywhere on {V <= level}."""
        c = enclose_number(level)[1]
        if not self.is_ready or not 0 < c < np.inf:
            return Answer.UNDECIDED
        reach = float(np.nextafter(np.sqrt(np.nextafter(c / self._shape, np.inf)), np.inf))
        tape = Tape(self._n)
        varying = {
            name: tape.interval(enclose_number(low)[0], enclose_number(high)[1])
            for name, (low, high) in self._V.loop.disturbances.items()
        }
        value, end = tape.loop(self._V.loop, self._states(tape), varying)[side.name], tape.number(side.end)
        beyond = tape.subtract(value, end) if side.sign > 0 else tape.subtract(end, value)
        program = tape.program([beyond, self._value(tape)])
        cube, nowhere = np.full(self._n, reach), np.full(self._n, -1.0)
        return negative_on_levels(program, -cube, cube, (-np.inf, c), nowhere, budget).answer

    @property
    def is_ready(self) -> bool:
        """Whether the equilibrium is enclosed and V proved to be positive definite, which every proof needs.

        Never for a loop with a hold: its commands lag behind, and V̇ says nothing of it.
        """
        return self._V.loop.hold is None and self._root is not None and self._shape > 0

    @property
    def box_work(self) -> int:
        """Elementary operations that one box costs, roughly."""
        n = self._n
        return len(self._program.ops) * (1 + n) * (2 + n)

    @cached_property
    def _root(self) -> EquilibriumEnclosure | None:
        return enclose_equilibrium(self._V.loop, self._V.centre)

    @cached_property
    def _radial(self) -> Radial | None:
        """V̇ along every direction, where the loop is cubic, rests at a float exactly, and has states enough to gain."""
        root = self._root
        if self._n < RADIAL or root is None or np.any(root.x.low != root.x.high):
            return None
        return radial(self._V, root.x.low, self._T)

    @cached_property
    def _T(self) -> Array:
        """Float matrix with T'PT near the identity and T'QT near a diagonal, Q = -(A'P + PA)."""
        P = self._V.P
        inverse = np.linalg.inv(np.linalg.cholesky(P)).T
        PA = P @ self._V.loop.jacobian(self._V.centre)
        Q = inverse.T @ (PA + PA.T) @ inverse
        return np.asarray(inverse @ np.linalg.eigh((Q + Q.T) / 2)[1] if np.all(np.isfinite(Q)) else inverse)

    @cached_property
    def _form(self) -> IntervalArray:
        """T'PT, (n, n)."""
        return IntervalArray.exact(self._T.T) @ (self._V.enclosed_P @ self._T)

    @cached_property
    def _shape(self) -> float:
        """Lower bound of the smallest eigenvalue of T'PT; negative or 0 where T or P is of no use."""
        try:
            return smallest_eigenvalue(self._form)[0] if np.all(np.isfinite(self._T)) else 0.0
        except np.linalg.LinAlgError:
            return 0.0

    def _is_inside(self, reach: float) -> bool:
        """Whether all x* + Tz with |z| <= reach lie strictly inside the domain."""
        assert self._root is not None
        T = IntervalArray.exact(self._T)
        squares = (T.squared() @ np.ones((self._n, 1)))[:, 0]
        extent = np.nextafter(np.nextafter(np.sqrt(squares.high), np.inf) * reach, np.inf)
        domain = IntervalArray.numbers(end for pair in self._V.loop.domain for end in pair)
        set_ = self._root.x + IntervalArray(-extent, extent)
        return bool(np.all((set_.low > domain.high[::2]) & (set_.high < domain.low[1::2])))

    def _states(self, tape: Tape) -> list[int]:
        """Rows of x = x* + Tz, with z as the tape's variables."""
        assert self._root is not None
        centre, T = self._root.x, self._T
        rows = []
        for i in range(self._n):
            y = tape.weighted([tape.number(entry) for entry in T[i]], range(self._n))
            rows.append(tape.add(tape.interval(centre.low[i], centre.high[i]), y))
        return rows

    @cached_property
    def _program(self) -> Program:
        """Tape of V̇ and V in z."""
        n = self._n
        tape = Tape(n)
        names = tape.loop(self._V.loop, self._states(tape))
        PT = self._V.enclosed_P @ self._T
        half = [
            tape.multiply(
                tape.weighted([tape.interval(PT.low[i, j], PT.high[i, j]) for j in range(n)], range(n)),
                tape.expression(tree, names),
            )
            for i, tree in enumerate(self._V.loop.dynamics)
        ]
        decrease = tape.multiply(tape.number(2), tape.total(half))
        return tape.program([decrease, self._value(tape)])

    def _value(self, tape: Tape) -> int:
        """Row of V in z."""
        n, form = self._n, self._form
        squares = [tape.multiply(tape.interval(form.low[i, i], form.high[i, i]), tape.multiply(i, i)) for i in range(n)]
        mixed = [
            tape.multiply(tape.interval(2 * form.low[i, j], 2 * form.high[i, j]), tape.multiply(i, j))
            for i in range(n)
            for j in range(i)
        ]
        return tape.total([*squares, *mixed])

    @cached_property
    def _dynamics(self) -> Program:
        """Tape of f(x* + Tz) in z."""
        tape = Tape(self._n)
        names = tape.loop(self._V.loop, self._states(tape))
        return tape.program(tape.expression(tree, names) for tree in self._V.loop.dynamics)

    def _cell(self, reach: float) -> float:
        """Half-width of a cube about zero in which V̇ < 0 but at zero; 0.0 where none was found."""
        if self._decreases(reach):
            return reach
        small, large = 0.0, reach
        for _ in range(HALVINGS):
            if self._decreases(large / 2):
                small = large / 2
                break
            large /= 2
        for _ in range(REFINEMENTS if small > 0 else 0):
            middle = (small + large) / 2
            small, large = (middle, large) if self._decreases(middle) else (small, middle)
        return small

    def _decreases(self, half_width: float) -> bool:
        cube = np.full((1, self._n), half_width)
        J = enclose(self._dynamics, -cube, cube, order=1).gradient[0]
        if not np.all(np.isfinite(J.low) & np.isfinite(J.high)):
            return False
        MJ = (IntervalArray.exact(self._T.T) @ self._V.enclosed_P) @ J
        return largest_eigenvalue(MJ + MJ.T)[1] < 0


def _undecided(reason: str) -> LevelProof:
    return LevelProof(Answer.UNDECIDED, reason=reason)
