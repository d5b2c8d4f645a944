"""The remainder of the linear part of a loop, weighed against the margin that its Lyapunov function leaves."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.bound.equilibrium_enclosure import EquilibriumEnclosure
from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape
from roa.loop.model import Loop

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Jet:
    """Value, gradient and Hessian of a scalar function at m points or over m boxes: (m,), (m, n), (m, n, n)."""

    value: IntervalArray
    gradient: IntervalArray
    hessian: IntervalArray


Jets = tuple[Jet, Jet]


@dataclass(frozen=True)
class Remainder:
    """M(y) = 2P g(y) with g(y) = f(x_eq + y) - A y, and φ(y) = |M(y)|^2 - λ^2 |y|^2.

    Attributes
    ----------
    loop : Loop
    root : enclosure of the equilibrium and of A
    P : IntervalArray (n, n)
    margin : λ > 0, a lower bound of the smallest eigenvalue of -(A'P + PA)
    """

    loop: Loop
    root: EquilibriumEnclosure
    P: IntervalArray
    margin: float

    @property
    def n(self) -> int:
        """Number of states."""
        return self.loop.n

    @property
    def work(self) -> int:
        """Elementary operations that one box costs, roughly."""
        n = self.n
        return len(self._program.ops) * (1 + n) * (2 + n) + 20 * n**4

    @cached_property
    def _program(self) -> Program:
        """Tape of g, with y as its variables."""
        root, n = self.root, self.n
        tape = Tape(n)
        x = [tape.add(i, tape.interval(root.x.low[i], root.x.high[i])) for i in range(n)]
        names = tape.loop(self.loop, x)
        linear = [[tape.interval(root.A.low[i, j], root.A.high[i, j]) for j in range(n)] for i in range(n)]
        return tape.program(
            tape.subtract(tape.expression(tree, names), tape.weighted(linear[i], range(n)))
            for i, tree in enumerate(self.loop.dynamics)
        )

    @cached_property
    def weight(self) -> float:
        """λ^2, rounded down."""
        return float(np.nextafter(self.margin * self.margin, 0))

    def reached(self, y: Array) -> NDArray[np.bool_]:
        """Whether φ(y) >= 0 for certain, at the points y (m, n)."""
        g = enclose(self._program, y, y, order=0)
        return self._value(2 * self.P @ _column(g.value), IntervalArray.exact(y)).low >= 0

    def jets(self, low: Array, high: Array, centre: Array) -> tuple[Jets, Jets]:
        """φ and |y|^2 at the centres to first order, and over the boxes [low, high] (m, n) to second order.

        M over the box comes from its value at the centre and its slopes, and the slopes from those at the
        centre and the curvature, where that is narrower: taken term by term, f and A y do not cancel.
        """
        m, n = low.shape
        at, over = enclose(self._program, centre, centre, order=1), enclose(self._program, low, high, order=2)
        box, middle, twice_P = IntervalArray(low, high), IntervalArray.exact(centre), 2 * self.P
        offset = _column(box - middle)
        M_middle, G_middle = twice_P @ _column(at.value), twice_P @ at.gradient
        K = (twice_P @ over.hessian.reshape(m, n, n * n)).reshape(m, n, n, n)
        bent = (K @ offset.reshape(m, 1, n, 1)).reshape(m, n, n)
        G = (twice_P @ over.gradient).intersect(G_middle + bent)
        M = (twice_P @ _column(over.value)).intersect(M_middle + G @ offset)
        unit = np.broadcast_to(np.eye(n), (m, n, n))
        hessian = 2 * (G.T @ G + (M.T @ K.reshape(m, n, n * n)).reshape(m, n, n)) - 2 * self.weight * unit
        flat = IntervalArray.exact(np.zeros((m, n, n)))
        phi_at = Jet(self._value(M_middle, middle), self._gradient(M_middle, G_middle, middle), flat)
        phi_over = Jet(self._value(M, box), self._gradient(M, G, box), hessian)
        square_at = Jet(_squares(middle), 2 * middle, flat)
        square_over = Jet(_squares(box), 2 * box, IntervalArray.exact(2 * unit))
        return (phi_at, square_at), (phi_over, square_over)

    def _value(self, M: IntervalArray, y: IntervalArray) -> IntervalArray:
        return _squares(M[..., 0]) - self.weight * _squares(y)

    def _gradient(self, M: IntervalArray, G: IntervalArray, y: IntervalArray) -> IntervalArray:
        return 2 * ((G.T @ M)[..., 0] - self.weight * y)


def _column(vectors: IntervalArray) -> IntervalArray:
    """Vectors (m, n) as columns (m, n, 1)."""
    return vectors[..., None]


def _squares(vectors: IntervalArray) -> IntervalArray:
    """Sum of squares of vectors (m, n), as (m,)."""
    return (vectors.squared() @ np.ones((vectors.shape[-1], 1)))[..., 0]
