"""Formulas for V that are quadratic in disguise, recognised in exact arithmetic."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.bound.lyapunov_function import FormulaV, Quadratic
from roa.loop.expression import Binary, Expression, Name, Negate, Number, Power

# A polynomial: exponents of the states -> coefficient, which is not zero.
Polynomial = dict[tuple[int, ...], Fraction]


def exact_quadratic(V: FormulaV) -> Quadratic | None:
    """Return V as (x - x_eq)'P(x - x_eq) with exact P where it is that and nothing else, otherwise None.

    The equilibrium must be a float exactly, and be proved to be: only then is the centre of the formula
    known to be the equilibrium, and not a point beside it.
    """
    loop = V.loop
    root = enclose_equilibrium(loop, V.centre)
    if root is None or np.any(root.x.low != root.x.high):
        return None
    names: dict[str, Polynomial | None] = {
        state: {tuple(int(i == j) for j in range(loop.n)): Fraction(1)} for i, state in enumerate(loop.states)
    }
    names.update({name: _constant(Fraction(p.value), loop.n) for name, p in loop.parameters.items()})
    for name, tree in loop.signals.items():
        names[name] = _expand(tree, names, loop.n)
    polynomial = _expand(V.tree, names, loop.n)
    if polynomial is None or max((sum(powers) for powers in polynomial), default=0) > 2:
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


def _expand(node: Expression, names: Mapping[str, Polynomial | None], n: int) -> Polynomial | None:
    """Multiply out to a polynomial of degree at most 2 in the n states; None where the formula is none."""
    match node:
        case Number(value):
            return _constant(Fraction(value), n)
        case Name(name):
            return names[name]
        case Negate(operand):
            return _scaled(_expand(operand, names, n), Fraction(-1))
        case Binary("+", left, right):
            return _sum(_expand(left, names, n), _expand(right, names, n))
        case Binary("-", left, right):
            return _sum(_expand(left, names, n), _scaled(_expand(right, names, n), Fraction(-1)))
        case Binary("*", left, right):
            return _product(_expand(left, names, n), _expand(right, names, n))
        case Binary("/", left, right):
            divisor = _expand(right, names, n)
            if divisor is None or set(divisor) != {(0,) * n}:
                return None
            return _scaled(_expand(left, names, n), 1 / divisor[(0,) * n])
        case Power(base, exponent) if exponent == 2:
            polynomial = _expand(base, names, n)
            return _product(polynomial, polynomial)
        case Power(base, exponent) if exponent == 1:
            return _expand(base, names, n)
    return None


def _constant(value: Fraction, n: int) -> Polynomial:
    return {(0,) * n: value} if value else {}


def _scaled(a: Polynomial | None, factor: Fraction) -> Polynomial | None:
    return None if a is None else {powers: factor * value for powers, value in a.items() if factor}


def _sum(a: Polynomial | None, b: Polynomial | None) -> Polynomial | None:
    if a is None or b is None:
        return None
    total = {powers: a.get(powers, Fraction(0)) + b.get(powers, Fraction(0)) for powers in a | b}
    return {powers: value for powers, value in total.items() if value}


def _product(a: Polynomial | None, b: Polynomial | None) -> Polynomial | None:
    """Product, None where its degree would exceed 2: what cancels later is not worth the growth."""
    if a is None or b is None:
        return None
    total: Polynomial = {}
    for p, value in a.items():
        for q, other in b.items():
            powers = tuple(i + j for i, j in zip(p, q, strict=True))
            if sum(powers) > 2:
                return None
            total[powers] = total.get(powers, Fraction(0)) + value * other
    return {powers: value for powers, value in total.items() if value}
