"""Formulas for V that are quadratic in disguise, recognised in exact arithmetic."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.bound.exact_polynomial import Polynomial, affine, expand, polynomial_names
from roa.bound.lyapunov_function import FormulaV, Quadratic


def exact_quadratic(V: FormulaV) -> Quadratic | None:
    """Return V as (x - x_eq)'P(x - x_eq) with exact P where it is that and nothing else, otherwise None.

    The equilibrium must be a float exactly, and be proved to be: only then is the centre of the formula
    known to be the equilibrium, and not a point beside it.
    """
    loop = V.loop
    root = enclose_equilibrium(loop, V.centre)
    if root is None or np.any(root.x.low != root.x.high):
        return None
    unit = [[Fraction(int(i == j)) for j in range(loop.n)] for i in range(loop.n)]
    names = polynomial_names(loop, [affine(Fraction(0), row) for row in unit], 2)
    polynomial = expand(V.tree, names, loop.n, 2)
    if polynomial is None:
        return None
    return _centred(V, polynomial, root.x.low)


def _centred(V: FormulaV, polynomial: Polynomial, centre: NDArray[np.float64]) -> Quadratic | None:
    n = V.loop.n
    unit = [tuple(int(i == j) for j in range(n)) for i in range(n)]
    P = [[Fraction(0)] * n for _ in range(n)]
    for i in range(n):
        for j in range(n):
            powers = tuple(a + b for a, b in zip(unit[i], unit[j], strict=True))
            P[i][j] = polynomial.get(powers, Fraction(0)) / (1 if i == j else 2)
    x = [Fraction(value) for value in centre]
    Px = [sum((P[i][j] * x[j] for j in range(n)), Fraction(0)) for i in range(n)]
    linear = all(polynomial.get(unit[i], Fraction(0)) == -2 * Px[i] for i in range(n))
    constant = sum((x[i] * Px[i] for i in range(n)), Fraction(0))
    if not linear or polynomial.get((0,) * n, Fraction(0)) != constant:
        return None
    floats = np.array([[float(entry) for entry in row] for row in P])
    return Quadratic(V.loop, V.centre, floats, tuple(tuple(row) for row in P))
