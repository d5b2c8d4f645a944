"""A Lyapunov function V of a loop, quadratic or a formula, with its gradient and V̇."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.kernel.interval_arrays import IntervalArray
from roa.loop.evaluate import evaluate
from roa.loop.expression import Expression
from roa.loop.model import Loop
from roa.loop.symbolic import Partials

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Quadratic:
    """V(x) = (x - centre)' P (x - centre), without a half.

    Attributes
    ----------
    loop : Loop
    centre : float64 (n,), the equilibrium, state units
    P : float64 (n, n), symmetric
    exact : n rows of n exact entries where P was given as decimals, which P only rounds; None where the
        floats of P are meant as they are (P from a Lyapunov equation)
    """

    loop: Loop
    centre: Array
    P: Array
    exact: tuple[tuple[Fraction, ...], ...] | None = None

    def value(self, x: Array) -> Array:
        """V at the points x, float64 (..., n) -> (...)."""
        y = x - self.centre
        return np.asarray(np.einsum("...i,ij,...j->...", y, self.P, y))

    def gradient(self, x: Array) -> Array:
        """dV/dx at the points x, float64 (..., n) -> (..., n)."""
        return 2 * (x - self.centre) @ self.P

    def decrease(self, x: Array) -> Array:
        """V̇ = dV/dx · f at the points x, float64 (..., n) -> (...), 1/s times the unit of V."""
        return np.asarray(np.einsum("...i,...i->...", self.gradient(x), self.loop.rhs(x)))

    @cached_property
    def enclosed_P(self) -> IntervalArray:
        """P as a proof may use it, (n, n)."""
        if self.exact is None:
            return IntervalArray.exact(self.P)
        flat = IntervalArray.numbers(entry for row in self.exact for entry in row)
        return IntervalArray(flat.low.reshape(self.P.shape), flat.high.reshape(self.P.shape))


@dataclass(frozen=True)
class FormulaV:
    """V given as a formula, zero at the equilibrium: in the states themselves, or in their distances from it.

    Attributes
    ----------
    loop : Loop
    centre : float64 (n,), the equilibrium, state units
    tree : Expression in states and parameters of the loop
    text : str, the formula as it was written
    from_equilibrium : the name of a state in the tree stands for its distance from the true equilibrium, of which
        the centre is only the nearest float: such a V can have its minimum there exactly
    """

    loop: Loop
    centre: Array
    tree: Expression
    text: str
    from_equilibrium: bool = False

    def value(self, x: Array) -> Array:
        """V at the points x, float64 (..., n) -> (...)."""
        return np.broadcast_to(evaluate(self.tree, self._values(x)), x.shape[:-1])

    def gradient(self, x: Array) -> Array:
        """dV/dx at the points x, float64 (..., n) -> (..., n)."""
        return self._partials.gradient(self._values(x), x.shape[:-1])

    def decrease(self, x: Array) -> Array:
        """V̇ = dV/dx · f at the points x, float64 (..., n) -> (...), 1/s times the unit of V."""
        return np.asarray(np.einsum("...i,...i->...", self.gradient(x), self.loop.rhs(x)))

    def _values(self, x: Array) -> dict[str, Array]:
        return self.loop.values_of(x - self.centre if self.from_equilibrium else x)

    @cached_property
    def _partials(self) -> Partials:
        loop = self.loop
        return Partials(loop.states, tuple(loop.parameters), loop.signals, (self.tree,))


LyapunovFunction = Quadratic | FormulaV
