"""Polynomials with exact rational coefficients, multiplied out from formulas."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction

from roa.loop.expression import Binary, Expression, Name, Negate, Number, Power
from roa.loop.model import Loop

# Exponents of the variables -> coefficient, which is not zero.
Polynomial = dict[tuple[int, ...], Fraction]


def polynomial_names(loop: Loop, states: Sequence[Polynomial], degree: int) -> dict[str, Polynomial | None]:
    """Return all names of a loop as polynomials in the variables that its states are polynomials in.

    None where a signal is no polynomial, or one of a degree above the given one.
    """
    n = loop.n
    names: dict[str, Polynomial | None] = dict(zip(loop.states, states, strict=True))
    names.update({name: constant(Fraction(parameter.value), n) for name, parameter in loop.parameters.items()})
    for name, tree in loop.signals.items():
        names[name] = expand(tree, names, n, degree)
    return names


def expand(node: Expression, names: Mapping[str, Polynomial | None], n: int, degree: int) -> Polynomial | None:
    """Multiply a formula out to a polynomial in n variables; None where it is none or exceeds the degree on the way.

    What cancels later is not worth the growth.
    """
    match node:
        case Number(value):
            return constant(Fraction(value), n)
        case Name(name):
            return names[name]
        case Negate(operand):
            return scaled(expand(operand, names, n, degree), Fraction(-1))
        case Binary("+", left, right):
            return total([expand(left, names, n, degree), expand(right, names, n, degree)])
        case Binary("-", left, right):
            return total([expand(left, names, n, degree), scaled(expand(right, names, n, degree), Fraction(-1))])
        case Binary("*", left, right):
            return product(expand(left, names, n, degree), expand(right, names, n, degree), degree)
        case Binary("/", left, right):
            divisor = expand(right, names, n, degree)
            if divisor is None or set(divisor) != {(0,) * n}:
                return None
            return scaled(expand(left, names, n, degree), 1 / divisor[(0,) * n])
        case Power(base, exponent) if exponent == exponent.to_integral_value() and 0 < exponent <= degree:
            polynomial = expand(base, names, n, degree)
            result = polynomial
            for _ in range(int(exponent) - 1):
                result = product(result, polynomial, degree)
            return result
    return None


def constant(value: Fraction, n: int) -> Polynomial:
    """Return a number as a polynomial in n variables."""
    return {(0,) * n: value} if value else {}


def affine(offset: Fraction, slopes: Sequence[Fraction]) -> Polynomial:
    """Return offset + slopes · variables."""
    n = len(slopes)
    units = {tuple(int(i == j) for j in range(n)): slope for i, slope in enumerate(slopes) if slope}
    return {**constant(offset, n), **units}


def scaled(a: Polynomial | None, factor: Fraction) -> Polynomial | None:
    """Return a times a number."""
    return None if a is None else {powers: factor * value for powers, value in a.items() if factor}


def total(terms: Iterable[Polynomial | None]) -> Polynomial | None:
    """Return the sum; None where a term is None."""
    result: Polynomial = {}
    for term in terms:
        if term is None:
            return None
        for powers, value in term.items():
            result[powers] = result.get(powers, Fraction(0)) + value
    return {powers: value for powers, value in result.items() if value}


def product(a: Polynomial | None, b: Polynomial | None, degree: int) -> Polynomial | None:
    """Return the product; None where a factor is None or the degree is exceeded."""
    if a is None or b is None:
        return None
    result: Polynomial = {}
    for p, value in a.items():
        for q, other in b.items():
            powers = tuple(i + j for i, j in zip(p, q, strict=True))
            if sum(powers) > degree:
                return None
            result[powers] = result.get(powers, Fraction(0)) + value * other
    return {powers: value for powers, value in result.items() if value}


def homogeneous(a: Polynomial, degree: int) -> Polynomial:
    """Return the part of one degree."""
    return {powers: value for powers, value in a.items() if sum(powers) == degree}
