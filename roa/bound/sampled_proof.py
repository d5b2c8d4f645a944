"""Proof that V decreases from sample to sample on {0 < V <= c} of a loop with a hold, closed inside the domain.

The state at a sample is ζ = x - x*, and with a delay (x - x*, u - u*) with the command u that still acts. One period
later it is its Taylor polynomial in time, the command w(x) put in after differentiating, but for a remainder ρ with
V(ρ) <= β² s², s² = |z|² + |κ (w - u*)|² in whitened coordinates ζ = T z. Since 2ab <= β (a² + s²) for a = √V, b = β s,

    ΔV <= (1 + β) ΔV of the polynomial + β V + (β + β²) s²,

which branch and bound shows to be negative; near zero ΔV = z'Mz with M in an interval matrix, as for V̇. Between the
samples the states are enclosed: by a box that lies in the domain, or by branch and bound over (z, t), face by face.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.bound import sampled_tape
from roa.bound.definite import largest_eigenvalue
from roa.bound.held_flow import joined
from roa.bound.level_proof import Level, LevelProof
from roa.bound.sampled_frame import SampledFrame
from roa.bound.sampled_function import SampledQuadratic
from roa.bound.sampled_period import Period, bound_period
from roa.kernel.branch_and_bound import Answer, negative_on_levels
from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape, enclose_number

Array = NDArray[np.float64]

HALVINGS, REFINEMENTS = 45, 6  # of the cube about the equilibrium
TYPICAL_DEGREE = 6


class SampledProver:
    """Proofs about the levels of one V of a loop with a hold.

    Parameters
    ----------
    V : SampledQuadratic
    """

    def __init__(self, V: SampledQuadratic) -> None:
        self._frame = SampledFrame(V)

    @property
    def obstacle(self) -> str:
        """Why nothing can be proved at all, or nothing."""
        return self._frame.obstacle

    @property
    def is_ready(self) -> bool:
        """Whether nothing stands in the way of proofs from the start."""
        return not self.obstacle

    @property
    def box_work(self) -> int:
        """Elementary operations that one box costs, roughly."""
        frame = self._frame
        return len(sampled_tape.bound_of_change(frame, TYPICAL_DEGREE, 0.0).ops) * (1 + frame.N) * (2 + frame.N)

    def prove(self, level: Level, budget: int) -> LevelProof:
        """Try to prove a level, given exactly, with at most `budget` boxes; equal arguments give equal answers."""
        c = enclose_number(level)[1]
        if self.obstacle:
            return _undecided(self.obstacle)
        if not 0 < c < np.inf:
            return _undecided("the level is no positive number")
        frame = self._frame
        reach = float(np.nextafter(np.sqrt(np.nextafter(c / frame.shape, np.inf)), np.inf))  # |z| <= reach on {V <= c}
        if not frame.box(reach).inside(frame.allowed):
            return _undecided("the level set is not proved to lie inside the domain")
        period = bound_period(frame, reach)
        if period is None:
            return _undecided("the states between two samples could not be enclosed")
        cell = self._cell(reach, period)
        if cell == 0:
            return _undecided("V could not be proved to decrease next to the equilibrium")
        cube = np.full(frame.N, reach)
        program = sampled_tape.bound_of_change(frame, period.degree, period.beta)
        found = negative_on_levels(program, -cube, cube, (0.0, c), np.full(frame.N, cell), budget)
        if found.answer is Answer.REFUTED and found.witness is not None:
            return self._with_witness(found.witness, period, found.boxes, found.left)
        if found.answer is not Answer.PROVED:
            reason = f"the budget of {budget} boxes was used up" if found.boxes >= budget else "boxes became too small"
            return LevelProof(found.answer, found.boxes, found.left, reason=reason)
        return self._between_samples(cube, c, period, found.boxes, budget)

    def _between_samples(self, cube: Array, c: float, period: Period, boxes: int, budget: int) -> LevelProof:
        """See that the states stay strictly inside the domain between samples too."""
        frame = self._frame
        faces = () if period.tube.inside(frame.allowed) else sampled_tape.faces(frame, period)
        for program, time in faces:
            low, high, cell = np.append(-cube, 0.0), np.append(cube, time), np.full(frame.N + 1, -1.0)
            found = negative_on_levels(program, low, high, (0.0, c), cell, max(budget - boxes, 0))
            boxes += found.boxes
            if found.answer is not Answer.PROVED:
                reason = "the states are not proved to stay inside the domain between samples"
                return LevelProof(Answer.UNDECIDED, boxes, 1.0, reason=reason)
        return LevelProof(Answer.PROVED, boxes, 0.0)

    def increases_at(self, x: Array) -> bool:
        """Whether V is greater one period after a start at the float point x (n,), for certain."""
        frame = self._frame
        if self.obstacle or frame.root is None:
            return False
        zeta = joined(IntervalArray.exact(x) - frame.root.x, IntervalArray.exact(np.zeros(frame.N - frame.n)))
        C = IntervalArray.exact(np.linalg.inv(frame.T))
        z = (C @ zeta).middle
        # |T^-1 ζ - z| <= |C (ζ - T z)| / (1 - |I - C T|) in the norm of the largest entry.
        unlike = (IntervalArray.exact(np.eye(frame.N)) - C @ frame.T).magnitude.sum(axis=1).max()
        if not unlike < 0.25:
            return False
        radius = 2 * float((C @ (zeta - IntervalArray.exact(frame.T) @ z)).magnitude.max())
        period = bound_period(frame, float(np.linalg.norm(np.abs(z) + radius)) * (1 + 1e-12))
        return period is not None and self._increase(z - radius, z + radius, period)

    def _with_witness(self, z: Array, period: Period, boxes: int, left: float) -> LevelProof:
        """What is refuted is the bound of ΔV; whether ΔV itself is above zero there is looked at anew."""
        if self._increase(z, z, period):
            x = self._frame.V.centre + (self._frame.T @ z)[: self._frame.n]
            return LevelProof(Answer.REFUTED, boxes, left, x)
        return LevelProof(Answer.UNDECIDED, boxes, left, reason="V hardly changes at a point of the set")

    def _increase(self, low: Array, high: Array, period: Period) -> bool:
        """Whether V grows over a period for certain from everywhere in a small box of z."""
        at = enclose(sampled_tape.measures(self._frame, period.degree), low[None], high[None], order=0).value[0]
        change, V, squares = at[0], at[1], at[2]
        T = enclose_number(self._frame.hold.period)
        after = (max(float(change.high), 0.0) * T[1] + float(V.high)) * (1 + 1e-14)
        least = np.nextafter(change.low * T[0], -np.inf)
        error = 2 * np.sqrt(after) * period.beta * np.sqrt(squares.high) * (1 + 1e-14)
        return bool(least > error)

    def _cell(self, reach: float, period: Period) -> float:
        """Half-width of a cube about zero in which V decreases but at zero; 0.0 where none was found."""
        tape = Tape(self._frame.N)
        q, w = sampled_tape.change(self._frame, tape, period.degree)
        program = tape.program([*q, *w])
        if self._decreases(program, period.beta, reach):
            return reach
        small, large = 0.0, reach
        for _ in range(HALVINGS):
            if self._decreases(program, period.beta, large / 2):
                small = large / 2
                break
            large /= 2
        for _ in range(REFINEMENTS if small > 0 else 0):
            middle = (small + large) / 2
            small, large = (middle, large) if self._decreases(program, period.beta, middle) else (small, middle)
        return small

    def _decreases(self, program: Program, beta: float, half_width: float) -> bool:
        N = self._frame.N
        cube = np.full((1, N), half_width)
        J = enclose(program, -cube, cube, order=1).gradient[0]
        if not np.all(np.isfinite(J.low) & np.isfinite(J.high)):
            return False
        Q, W = J[:N], IntervalArray.exact(np.diag(self._frame.kappa)) @ J[N:]
        T = IntervalArray.numbers([self._frame.hold.period])[0]
        b = IntervalArray.exact(beta)
        P = self._frame.V.enclosed_whole
        across = Q.T @ (P @ self._frame.T)
        change = across + across.T + (Q.T @ (P @ Q)) * T
        squares = IntervalArray.exact(np.eye(N)) + W.T @ W
        # Divided by the period from below, so that what is added is from above.
        rate = IntervalArray.exact(np.nextafter(1 / T.low, np.inf))
        M = change * (b + 1.0) + self._frame.form * (b * rate) + squares * ((b + b * b) * rate)
        return largest_eigenvalue(M)[1] < 0


def _undecided(reason: str) -> LevelProof:
    return LevelProof(Answer.UNDECIDED, reason=reason)
