"""Coordinates z about an equilibrium, x = x* + T z, in which loops and Lyapunov functions are put on tapes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.bound.equilibrium_enclosure import EquilibriumEnclosure
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Tape
from roa.loop.model import Loop

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Rows:
    """Rows of a tape whose variables are z.

    Attributes
    ----------
    tape : Tape
    offsets, states : y = T z and x = x* + y
    names : rows of all names of the loop
    """

    tape: Tape
    offsets: list[int]
    states: list[int]
    names: dict[str, int]

    def dynamics(self, loop: Loop) -> list[int]:
        """Rows of f(x)."""
        return [self.tape.expression(tree, self.names) for tree in loop.dynamics]

    def value(self, V: LyapunovFunction) -> int:
        """Row of V(x)."""
        if isinstance(V, Quadratic):
            return quadratic_row(self.tape, V.enclosed_P, self.offsets)
        return self.tape.expression(V.tree, formula_names(V.loop, self.names, self.offsets, V.from_equilibrium))


@dataclass(frozen=True)
class Chart:
    """Coordinates about an enclosed equilibrium.

    Attributes
    ----------
    loop : Loop
    root : the true equilibrium x*, enclosed
    T : float64 (n, n), regular, taken as exact whatever it is
    """

    loop: Loop
    root: EquilibriumEnclosure
    T: Array

    def rows(self) -> Rows:
        """Begin a tape."""
        n, tape = self.loop.n, Tape(self.loop.n)
        offsets = [tape.weighted([tape.number(entry) for entry in self.T[i]], range(n)) for i in range(n)]
        centre = self.root.x
        states = [tape.add(tape.interval(centre.low[i], centre.high[i]), offsets[i]) for i in range(n)]
        return Rows(tape, offsets, states, tape.loop(self.loop, states))

    def states(self, low: Array, high: Array) -> IntervalArray:
        """Enclose x over the box [low, high] of z, (n,)."""
        return self.root.x + (IntervalArray.exact(self.T) @ IntervalArray(low, high)[:, None])[:, 0]

    def points(self, z: Array) -> Array:
        """Floats near x for z, float64 (..., n) -> (..., n)."""
        return np.asarray(self.root.x.middle + z @ self.T.T)


def quadratic_row(tape: Tape, P: IntervalArray, y: list[int]) -> int:
    """Row of y'Py for an enclosed symmetric P, (n, n)."""
    rows = [
        tape.weighted([tape.interval(low, high) for low, high in zip(P.low[i], P.high[i], strict=True)], y)
        for i in range(len(y))
    ]
    return tape.weighted(y, rows)


def formula_names(loop: Loop, names: dict[str, int], offsets: list[int], from_equilibrium: bool) -> dict[str, int]:
    """Rows of the names in a formula for V: those of the loop, or the states as distances from the equilibrium."""
    return {**names, **dict(zip(loop.states, offsets, strict=True))} if from_equilibrium else names
