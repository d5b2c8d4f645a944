"""The no-return set: {U >= c} within the domain, none of whose points converges without leaving the domain first.

It is enough that U̇ > 0 at every point of the domain with U = c, and that U < c at the equilibrium: a trajectory would
have to cross U = c downwards. U is a polynomial, zero at the equilibrium, from a linear programme: U <= 1 within the
simulated edge R and up to (1 + 0.15 δ) R, U >= 1 from (1 + δ) R out to the faces, and in the shell between the two
U̇ >= m (r/R - 1) with m as large as can be; |U| <= 1 within keeps that
finite. Then c is lowered as far as the proof goes.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from roa.bound.level_set_proof import LevelSetProver
from roa.bound.lyapunov_function import Quadratic
from roa.bound.monomials import Monomials
from roa.bound.search_guide import Guide, Say
from roa.bound.statement import OUTER, Bound, Strength
from roa.bound.volume import ball_volume
from roa.kernel.branch_and_bound import Answer

Array = NDArray[np.float64]

NAME = OUTER
DEGREES = {1: (2, 4), 2: (2, 4, 6, 8), 3: (2, 4)}
DEGREES_MORE = (2, 4)
DELTAS = (0.01, 0.03, 0.1, 0.3)
INSIDE = np.linspace(0.2, 1.0, 9)
SHELL = (0.15, 0.4, 0.7, 1.0)  # parts of δ
OUTSIDE = np.linspace(0.0, 1.0, 9) ** 1.5  # parts of the way from (1 + δ) R to the face
STEPS = (0.01, 0.05, 0.2, 0.5, 0.9)  # of c upwards, in parts of what the sample leaves
ROUNDS = 4  # of counterexamples
WORST = 300
BOXES, WORK = 3_000_000, 2e9
GOOD = 1.003  # volume against that within the edge beyond which no other degree is tried


def no_return_set(guide: Guide, degree: int | None, boxes: int | None, say: Say) -> Bound:
    """Search for the largest proved no-return set; level 0 with the reason in the note where none was proved.

    The bound is {U <= level}, the rest of the domain: nothing else can converge within it.

    Parameters
    ----------
    guide : with the edge of what converges without leaving the domain
    degree : of U; None for the degrees that the number of states affords
    boxes : most boxes of one proof; None for what some seconds can do
    say : told of every success
    """
    nothing = Bound(NAME, Quadratic(guide.loop, guide.centre, guide.S.T @ guide.S), 0.0, Strength.ESTIMATED, "")
    if np.all(guide.edge.open):
        return _without(
            nothing, "all rays reach the domain's faces within the simulated basin: nothing is left outside"
        )
    best, smallest = nothing, np.inf
    inside = float(np.mean(guide.edge.radius**guide.n))
    for d in (degree,) if degree is not None else DEGREES.get(guide.n, DEGREES_MORE):
        for delta in DELTAS:
            found = _Programme(guide, Monomials.up_to(guide.n, d, lowest=1), delta).proved(boxes)
            if found is None:
                continue
            if found[0] < smallest:
                smallest, best = found
                say(f"proved a no-return set of degree {d}: {smallest / inside:.5g} times the simulated volume is left")
            break
        if smallest < GOOD * inside:
            break
    return (
        best if best.level > 0 else _without(nothing, "no polynomial that rises on a level all round could be proved")
    )


def _without(nothing: Bound, reason: str) -> Bound:
    return Bound(nothing.name, nothing.V, 0.0, nothing.strength, reason)


class _Programme:
    """The linear programme for one degree and δ; the unknowns are the coefficients of U and m."""

    def __init__(self, guide: Guide, monomials: Monomials, delta: float) -> None:
        self._guide, self._monomials = guide, monomials
        edge, face = guide.edge.radius, guide.edge.face
        inner = np.concatenate([edge[:, None] * INSIDE, np.minimum(edge * (1 + 0.15 * delta), face)[:, None]], axis=1)
        self._inner = monomials.values(guide.along_rays(inner))
        start = edge * (1 + delta)
        out = start < face
        beyond = np.where(out[:, None], start[:, None] + OUTSIDE * (face - start)[:, None], np.nan)
        self._outer = monomials.values(_finite(guide.along_rays(beyond)))
        shell = edge[:, None] * (1 + delta * np.array(SHELL))
        shell = np.where(shell <= face[:, None], shell, np.nan)
        z = guide.along_rays(shell)
        weight = np.broadcast_to(delta * np.array(SHELL), shell.shape).ravel()
        known = np.all(np.isfinite(z), axis=1)
        self._rising = [self._rows(z[known], weight[known])]

    def _rows(self, z: Array, weight: Array) -> Array:
        """Rows of -U̇ + weight m <= 0."""
        flow = self._guide.flow(z)
        good = np.all(np.isfinite(flow), axis=1)
        return np.column_stack([-self._monomials.derivatives(z[good], flow[good]), weight[good]])

    def _solve(self) -> Array | None:
        rising = np.concatenate(self._rising)
        k = len(self._monomials.exponents)
        rows = np.concatenate(
            [
                np.column_stack([self._inner, np.zeros(len(self._inner))]),
                np.column_stack([-self._inner, np.zeros(len(self._inner))]),
                np.column_stack([-self._outer, np.zeros(len(self._outer))]),
                rising,
            ]
        )
        limits = np.concatenate([np.ones(2 * len(self._inner)), -np.ones(len(self._outer)), np.zeros(len(rising))])
        found = linprog(np.append(np.zeros(k), -1.0), A_ub=rows, b_ub=limits, bounds=(None, None), method="highs")
        return np.asarray(found.x[:k]) if found.status == 0 and found.x[-1] > 0 else None

    def proved(self, boxes: int | None) -> tuple[float, Bound] | None:
        """Volume of {U <= c}, in that of the unit ball in z, with the bound; None where nothing is proved."""
        guide, monomials = self._guide, self._monomials
        z = guide.checked
        values, flow = monomials.values(z), guide.flow(z)
        derivatives = monomials.derivatives(z, flow)
        known = np.all(np.isfinite(flow), axis=1)
        beyond = np.linalg.norm(z, axis=1) > guide.edge_towards(z) * 1.001
        for _ in range(ROUNDS):
            a = self._solve()
            if a is None:
                return None
            U, falling = values @ a, known & (derivatives @ a <= 0)
            lowest = float(U[falling & ~beyond].max(initial=0.0))
            outside = beyond & falling & (lowest < U)
            highest = float(U[outside].min(initial=1.02 * max(1.0, lowest)))
            if highest > 1.0:
                found = self._lowered(a, lowest, highest, boxes)
                if found is not None:
                    return found
            against = np.flatnonzero(outside)
            if not len(against):
                return None
            worst = against[np.argsort(U[against], kind="stable")[:WORST]]
            self._rising.append(self._rows(z[worst], np.zeros(len(worst))))
        return None

    def _lowered(self, a: Array, lowest: float, highest: float, boxes: int | None) -> tuple[float, Bound] | None:
        """Prove the lowest c at which, by the sample, U̇ > 0: from `lowest` up to `highest`."""
        V = self._guide.function(self._monomials, a)
        prover = LevelSetProver(V)
        if not prover.is_ready:
            return None
        budget = min(BOXES, int(WORK / prover.box_work)) if boxes is None else boxes
        for step in STEPS:
            c = float(f"{lowest + step * (highest - lowest):.9g}")
            proof = prover.prove_rising_on(c, budget)
            if proof.answer is Answer.PROVED:
                note = "the rest of the domain, less {U >= c}: U̇ > 0 on U = c is proved by interval branch and bound "
                note += f"({proof.boxes} boxes), so that no point beyond converges without leaving the domain first"
                share = float(np.mean(self._monomials.values(self._guide.checked) @ a <= c))
                volume = share * self._guide.loop.domain_volume * abs(float(np.linalg.det(self._guide.S)))
                return volume / ball_volume(self._guide.n), Bound(NAME, V, c, Strength.PROVED, note)
        return None


def _finite(points: Array) -> Array:
    return np.asarray(points[np.all(np.isfinite(points), axis=1)])
