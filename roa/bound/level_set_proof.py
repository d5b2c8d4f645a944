"""Proof for any V that the part of {V <= c} that holds the equilibrium lies in the basin.

V is a quadratic or a formula: a polynomial, sines, whatever the language has that is smooth. Let K be that connected
part, within a region: a box in coordinates z about the equilibrium, cut with the domain. What is proved:

1. K keeps strictly inside the region: V > c wherever the region ends. It keeps strictly within the limits, too.
2. V̇ < 0 at every point of K but the equilibrium x*.

Then K is compact, no trajectory leaves it, and V falls along each until it is at x*. V has its only minimum in K there,
since anywhere else it would fall further; so V > V(x*) need not be asked for.

Next to x* V̇ vanishes, and no box would ever tell it apart from zero. Where the gradient of V at x* is exactly zero,
∇V = Gz and f = Jz with the rows of both matrices in the hulls of their slopes over a cube, so V̇ = z'G'Jz, and a cube
over which G'J + J'G is negative definite is done. Where that fails (a minimum without curvature, or a formula about the
float nearest to x*) an ellipsoid takes the place of the cube that is proved to lie in the basin by itself: whoever
enters it has arrived, and V̇ < 0 is proved outside it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from decimal import Decimal
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.bound.chart import Chart, Rows, quadratic_row
from roa.bound.definite import largest_eigenvalue
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, enclose_equilibrium
from roa.bound.inner_ellipsoid import InnerEllipsoid, inner_ellipsoid
from roa.bound.level_proof import LevelProof
from roa.bound.level_reach import level_reach
from roa.bound.lyapunov_function import LyapunovFunction
from roa.kernel.branch_and_bound import Answer, Search, negative_on_levels
from roa.kernel.enclosure import Enclosed, enclose
from roa.kernel.tape import Program, enclose_number
from roa.kernel.tape_slopes import NotSmoothError, partials

Array = NDArray[np.float64]
Level = Decimal | Fraction | float

MARGIN = 0.02  # of the box about the level set, as a part of its width, on each side
OUTWARD = 1e-6  # of the box about the domain
WALLS = 10  # part of the budget that any one wall may take
HALVINGS, REFINEMENTS = 45, 6  # of the cube about the equilibrium
CURVED = 1e-7  # a curvature of V so many times smaller than the largest, in half-widths, is none


@dataclass(frozen=True)
class _Region:
    """A box in z, cut with the domain.

    Attributes
    ----------
    low, high : float64 (n,)
    """

    low: Array
    high: Array


class LevelSetProver:
    """Proofs about the levels of one V.

    Parameters
    ----------
    V : LyapunovFunction
    limits : (name of a state or signal, lowest, highest): K must keep strictly within
    """

    def __init__(self, V: LyapunovFunction, limits: tuple[tuple[str, Decimal, Decimal], ...] = ()) -> None:
        self._V, self._loop, self._n = V, V.loop, V.loop.n
        self._limits = limits

    @cached_property
    def obstacle(self) -> str:
        """Why nothing can be proved of this V, whatever the level; empty where something may."""
        if self._root is None:
            return "the equilibrium could not be enclosed"
        if self._slopes is None:
            return "V is not smooth, and V̇ has no single value at its kinks"
        return ""

    @property
    def is_ready(self) -> bool:
        """Whether nothing stands in the way of proofs from the start."""
        return not self.obstacle

    @property
    def is_exact(self) -> bool:
        """Whether V̇ < 0 is proved next to the equilibrium too, and not only outside an ellipsoid about it."""
        return self.is_ready and self._cell > 0

    def prove(self, level: Level, budget: int) -> LevelProof:
        """Try to prove a level, given exactly, with about `budget` boxes; equal arguments give equal answers."""
        c = enclose_number(level)[1]
        if reason := self.obstacle or self._not_above_rest(c):
            return LevelProof(Answer.UNDECIDED, reason=reason)
        if self._cell == 0 and self._ellipsoid is None:
            return LevelProof(Answer.UNDECIDED, reason="V̇ < 0 could not be proved next to the equilibrium")
        boxes, proof = 0, LevelProof(Answer.UNDECIDED, reason=f"the budget of {budget} boxes was used up")
        for region in self._regions(c):
            wall, used = self._reached_wall(region, c, budget // WALLS)
            boxes += used
            if wall:
                proof = LevelProof(Answer.UNDECIDED, reason=wall)
            if wall or boxes >= budget:
                continue
            proof = _stated(self._decreases(region, c, budget - boxes), self._chart)
            return replace(proof, boxes=boxes + proof.boxes)
        return replace(proof, boxes=boxes)

    def prove_rising_on(self, level: Level, budget: int) -> LevelProof:
        """Try to prove that V̇ > 0 wherever V is exactly the level within the domain, and V(x*) less.

        Then no point of {V >= level} within the domain converges without leaving the domain first.
        """
        low, high = enclose_number(level)
        if reason := self.obstacle or self._not_above_rest(low):
            return LevelProof(Answer.UNDECIDED, reason=reason)
        return self.prove_between((low, high), budget, rising=True)

    def prove_between(self, levels: tuple[float, float], budget: int, rising: bool = False) -> LevelProof:
        """Try to prove V̇ < 0, or V̇ > 0, wherever c_low <= V <= c_high in the domain, whatever part of it that is."""
        if self.obstacle:
            return LevelProof(Answer.UNDECIDED, reason=self.obstacle)
        assert self._root is not None
        chart = Chart(self._loop, self._root, np.diag(self._loop.half_widths))
        region = self._domain_region(chart)
        program = self._program(chart, region, -1 if rising else 1)
        return _stated(negative_on_levels(program, region.low, region.high, levels, -np.ones(self._n), budget), chart)

    @property
    def box_work(self) -> int:
        """Elementary operations that one box costs, roughly."""
        program = self._program(self._chart, self._domain_region(self._chart), 1)
        return len(program.ops) * (1 + self._n) * (2 + self._n)

    # The equilibrium, and the coordinates about it.

    @cached_property
    def _root(self) -> EquilibriumEnclosure | None:
        return enclose_equilibrium(self._loop, self._V.centre)

    @cached_property
    def _slopes(self) -> Program | None:
        """Tape of ∇V and V in distances from the equilibrium, None where V is not smooth."""
        assert self._root is not None
        rows = Chart(self._loop, self._root, np.eye(self._n)).rows()
        V = rows.value(self._V)
        try:
            return rows.tape.program([*partials(rows.tape, V, rows.offsets), V])
        except NotSmoothError:
            return None

    @cached_property
    def _at_rest(self) -> Enclosed:
        """∇V and V at the true equilibrium."""
        assert self._slopes is not None
        origin = np.zeros((1, self._n))
        return enclose(self._slopes, origin, origin, order=1)

    def _not_above_rest(self, c: float) -> str:
        above = bool(self._at_rest.value.high[0, -1] < c) and c < np.inf
        return "" if above else "V at the equilibrium is not proved to be below the level"

    @cached_property
    def _chart(self) -> Chart:
        """Coordinates in which V is nearly |z|² next to x* and V̇ nearly -z'Dz; the half-widths where it is flat."""
        assert self._root is not None
        scale = self._loop.half_widths
        T = np.diag(scale)
        H = self._at_rest.gradient.middle[0, : self._n]
        H = (H + H.T) / 4
        scaled = scale[:, None] * H * scale
        if np.all(np.isfinite(scaled)):
            curvatures = np.linalg.eigvalsh(scaled)
            if curvatures[0] > CURVED * curvatures[-1]:
                inverse = T @ np.linalg.inv(np.linalg.cholesky(scaled)).T
                HA = H @ self._loop.jacobian(self._V.centre)
                Q = inverse.T @ (HA + HA.T) @ inverse
                T = inverse @ np.linalg.eigh((Q + Q.T) / 2)[1] if np.all(np.isfinite(Q)) else inverse
        return Chart(self._loop, self._root, T)

    # Regions.

    def _regions(self, c: float) -> Iterator[_Region]:
        low, high = level_reach(self._V, self._chart, c)
        margin = MARGIN * (high - low)
        if np.all(margin > 0):
            yield _Region(low - margin, high + margin)
        yield self._domain_region(self._chart)

    def _domain_region(self, chart: Chart) -> _Region:
        """A box that holds the domain, nearly; where it does not, it is the smaller region that counts."""
        inverse = np.linalg.inv(chart.T)
        ends = inverse[:, :, None] * (self._loop.box - self._V.centre[:, None])
        low, high = ends.min(axis=2).sum(axis=1), ends.max(axis=2).sum(axis=1)
        outward = OUTWARD * (high - low)
        return _Region(low - outward, high + outward)

    # Programs.

    def _program(self, chart: Chart, region: _Region, sign: int) -> Program:
        """Tape of sign·V̇ and V, then what is not below zero in the region."""
        rows = chart.rows()
        V = rows.value(self._V)
        decrease = rows.tape.weighted(partials(rows.tape, V, rows.offsets), rows.dynamics(self._loop))
        W = decrease if sign > 0 else rows.tape.negate(decrease)
        return rows.tape.program([W, V, *self._within(rows, chart, region)])

    def _within(self, rows: Rows, chart: Chart, region: _Region) -> list[int]:
        """Rows that are not below zero in the domain, for the faces that the region reaches."""
        return [rows.tape.negate(beyond) for beyond in self._beyond_domain(rows, chart, region)]

    def _beyond_domain(self, rows: Rows, chart: Chart, region: _Region) -> list[int]:
        """Rows that are below zero strictly inside the domain, for the faces that the region reaches."""
        tape, x = rows.tape, chart.states(region.low, region.high)
        found = []
        for i, (low, high) in enumerate(self._loop.domain):
            if not x.high[i] < enclose_number(high)[0]:
                found.append(tape.subtract(rows.states[i], tape.number(high)))
            if not x.low[i] > enclose_number(low)[1]:
                found.append(tape.subtract(tape.number(low), rows.states[i]))
        return found

    # The steps of a proof.

    def _reached_wall(self, region: _Region, c: float, budget: int) -> tuple[str, int]:
        """Say which wall the set is not proved to keep away from, "" for none; and the boxes looked at."""
        boxes = 0
        for wall, found in self._walls(region, c, budget):
            boxes += found.boxes
            if found.answer is not Answer.PROVED:
                return f"the level set is not proved to keep strictly within {wall}", boxes
        return "", boxes

    def _walls(self, region: _Region, c: float, budget: int) -> Iterator[tuple[str, Search]]:
        """Search the faces of the box, those of the domain that it reaches, and the limits, for points with V <= c."""
        chart, n = self._chart, self._n
        rows = chart.rows()
        V, within = rows.value(self._V), self._within(rows, chart, region)
        anywhere = rows.tape.program([rows.tape.number(1), V, *within])
        levels, nowhere = (-np.inf, c), -np.ones(n)
        for i in range(n):
            for end in (region.low[i], region.high[i]):
                low, high = region.low.copy(), region.high.copy()
                low[i] = high[i] = end
                yield "a box about it", negative_on_levels(anywhere, low, high, levels, nowhere, budget)
        faces, limits = self._beyond_domain(rows, chart, region), self._beyond_limits(rows)
        for wall, row in [*(("the domain", row) for row in faces), *(("its limits", row) for row in limits)]:
            program = rows.tape.program([row, V, *within])
            yield wall, negative_on_levels(program, region.low, region.high, levels, nowhere, budget)

    def _beyond_limits(self, rows: Rows) -> list[int]:
        """Rows that are below zero strictly within the limits."""
        tape = rows.tape
        return [
            row
            for name, low, high in self._limits
            for row in (
                tape.subtract(rows.names[name], tape.number(high)),
                tape.subtract(tape.number(low), rows.names[name]),
            )
        ]

    def _decreases(self, region: _Region, c: float, budget: int) -> Search:
        """Search the region for points with V <= c and V̇ >= 0, but for the cube or the ellipsoid about x*."""
        program = self._program(self._chart, region, 1)
        if self._cell == 0:
            assert self._ellipsoid is not None
            program = self._outside_ellipsoid(region, self._ellipsoid)
        cell = np.full(self._n, self._cell if self._cell > 0 else -1.0)
        return negative_on_levels(program, region.low, region.high, (-np.inf, c), cell, budget)

    def _outside_ellipsoid(self, region: _Region, ellipsoid: InnerEllipsoid) -> Program:
        rows = self._chart.rows()
        V = rows.value(self._V)
        decrease = rows.tape.weighted(partials(rows.tape, V, rows.offsets), rows.dynamics(self._loop))
        size = quadratic_row(rows.tape, ellipsoid.V.enclosed_P, rows.offsets)
        outside = rows.tape.subtract(size, rows.tape.number(ellipsoid.level))
        return rows.tape.program([decrease, V, *self._within(rows, self._chart, region), outside])

    # Next to the equilibrium.

    @cached_property
    def _ellipsoid(self) -> InnerEllipsoid | None:
        assert self._root is not None
        return inner_ellipsoid(self._loop, self._root)

    @cached_property
    def _near(self) -> Program:
        """Tape of ∇V, then f."""
        rows = self._chart.rows()
        slopes = partials(rows.tape, rows.value(self._V), rows.offsets)
        return rows.tape.program([*slopes, *rows.dynamics(self._loop)])

    @cached_property
    def _cell(self) -> float:
        """Half-width of a cube of z about zero in which V̇ < 0 but at zero; 0.0 where none was found."""
        if not (np.all(self._at_rest.value.low[0, :-1] == 0) and np.all(self._at_rest.value.high[0, :-1] == 0)):
            return 0.0
        region = self._domain_region(self._chart)
        large = float(np.maximum(-region.low, region.high).max())
        small = 0.0
        if self._falls_in_cube(large):
            return large
        for _ in range(HALVINGS):
            large /= 2
            if self._falls_in_cube(large):
                small, large = large, 2 * large
                break
        for _ in range(REFINEMENTS if small > 0 else 0):
            middle = (small + large) / 2
            small, large = (middle, large) if self._falls_in_cube(middle) else (small, middle)
        return small

    def _falls_in_cube(self, half_width: float) -> bool:
        cube = np.full((1, self._n), half_width)
        slopes = enclose(self._near, -cube, cube, order=1).gradient[0]
        if not np.all(np.isfinite(slopes.low) & np.isfinite(slopes.high)):
            return False
        product = slopes[: self._n].T @ slopes[self._n :]
        return largest_eigenvalue(product + product.T)[1] < 0


def _stated(found: Search, chart: Chart) -> LevelProof:
    if found.answer is Answer.UNDECIDED:
        return LevelProof(found.answer, found.boxes, found.left, reason=f"{found.boxes} boxes did not decide it")
    witness = None if found.witness is None else chart.points(found.witness)
    return LevelProof(found.answer, found.boxes, found.left, witness)
