"""A box that provably holds exactly one equilibrium: the float that Newton found is rarely the root itself."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape
from roa.loop.model import Loop

Array = NDArray[np.float64]

ATTEMPTS = 12
REFINEMENTS = 4


@dataclass(frozen=True)
class EquilibriumEnclosure:
    """What is certain about an equilibrium.

    Attributes
    ----------
    x : IntervalArray (n,), holds the equilibrium, state units
    A : IntervalArray (n, n), holds the Jacobian there, 1/s times state units (Clarke's at a kink)
    """

    x: IntervalArray
    A: IntervalArray

    def distance(self, x: Array) -> float:
        """Upper bound of the Euclidean distance of the float point x, state units."""
        return upper_norm((self.x - x).magnitude)


def dynamics_program(loop: Loop) -> Program:
    """Return the tape of f with the states as its variables."""
    tape = Tape(loop.n)
    names = tape.loop(loop, range(loop.n))
    return tape.program(tape.expression(tree, names) for tree in loop.dynamics)


def enclose_equilibrium(loop: Loop, x: Array) -> EquilibriumEnclosure | None:
    """Enclose the equilibrium near the float point x, or return None where none can be proved.

    Krawczyk's operator K(X) = m - C f(m) + (I - C J(X)) (X - m), with m a float point of X and C an approximate
    inverse of the Jacobian: every root in X lies in K(X), and if K(X) lies in the interior of X, then there is
    exactly one. The point must be in X: J(X) has to cover the way from it to the root.
    Source: Krawczyk 1969; Neumaier, Interval Methods for Systems of Equations, 1990, section 5.1 (from memory).

    Parameters
    ----------
    loop : Loop
    x : float64 (n,), state units
    """
    program = dynamics_program(loop)
    at_x = enclose(program, x[None], x[None], order=1)
    jacobian = at_x.gradient[0].middle
    if not np.all(np.isfinite(jacobian)):
        return None
    try:
        C = IntervalArray.exact(np.linalg.inv(jacobian))
    except np.linalg.LinAlgError:
        return None

    def krawczyk(X: IntervalArray) -> IntervalArray:
        m = np.clip(X.middle, X.low, X.high)
        step = C @ enclose(program, m[None], m[None], order=0).value[0]
        J = enclose(program, X.low[None], X.high[None], order=1).gradient[0]
        return IntervalArray.exact(m) - step + (IntervalArray.exact(np.eye(loop.n)) - C @ J) @ (X - m)

    radius = 2 * (C @ at_x.value[0]).magnitude + 1e-15 * np.abs(x) + 1e-14 * loop.half_widths
    for _ in range(ATTEMPTS):
        X = IntervalArray(x - radius, x + radius)
        image = krawczyk(X)
        if image.inside(X):
            break
        radius = 2 * np.maximum(radius, (image - x).magnitude)
        if not np.all(np.isfinite(radius)):
            return None
    else:
        return None
    if np.all(at_x.value.low == 0) and np.all(at_x.value.high == 0):
        X = IntervalArray.exact(x)  # f vanishes exactly at this float, and X holds no other root
    else:
        for _ in range(REFINEMENTS):
            X = krawczyk(X).intersect(X)
    return EquilibriumEnclosure(X, enclose(program, X.low[None], X.high[None], order=1).gradient[0])


def upper_norm(magnitudes: Array) -> float:
    """Upper bound of the Euclidean norm of numbers bounded by the magnitudes (any shape); NaN stays NaN."""
    flat = np.ravel(magnitudes)
    # The sum of squares errs by less than its number of terms times 2^-52 of itself.
    return float(np.nextafter(np.sqrt(np.sum(flat * flat)) * (1 + (len(flat) + 4) * 2.3e-16) + 1e-150, np.inf))
