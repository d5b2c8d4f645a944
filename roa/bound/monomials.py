"""Polynomials without constant and linear terms: features for linear programmes, and the formula in decimals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Context, Decimal
from itertools import combinations_with_replacement

import numpy as np
from numpy.typing import NDArray

from roa.loop.expression import Binary, Expression, Name, Number, Power

Array = NDArray[np.float64]

DIGITS = 15  # of the coefficients of the formula


@dataclass(frozen=True)
class Monomials:
    """The k monomials of n variables from degree `lowest` to `degree`.

    Attributes
    ----------
    exponents : int64 (k, n)
    """

    exponents: NDArray[np.int64]

    @classmethod
    def up_to(cls, n: int, degree: int, lowest: int = 2) -> Monomials:
        """All monomials of those degrees, the lowest first."""
        rows = [
            np.bincount(chosen, minlength=n)
            for d in range(lowest, degree + 1)
            for chosen in combinations_with_replacement(range(n), d)
        ]
        return cls(np.array(rows, dtype=np.int64).reshape(-1, n))

    def values(self, z: Array) -> Array:
        """Features at the points z (m, n): (m, k)."""
        powers = self._powers(z)
        result = np.ones((len(z), len(self.exponents)))
        for i, row in enumerate(self.exponents.T):
            result *= powers[:, i, row]
        return result

    def derivatives(self, z: Array, along: Array) -> Array:
        """Derivatives of the features at z (m, n) along the vectors `along` (m, n): (m, k)."""
        powers = self._powers(z)
        result = np.zeros((len(z), len(self.exponents)))
        for i in range(z.shape[1]):
            term = self.exponents[:, i] * powers[:, i, np.maximum(self.exponents[:, i] - 1, 0)]
            for j, row in enumerate(self.exponents.T):
                if j != i:
                    term = term * powers[:, j, row]
            result += term * along[:, i, None]
        return result

    def quadratic_part(self, coefficients: Array) -> Array:
        """Matrix (n, n) of the terms of degree 2."""
        n = self.exponents.shape[1]
        H = np.zeros((n, n))
        for row, value in zip(self.exponents, coefficients, strict=True):
            if row.sum() == 2:
                i, j = np.repeat(np.arange(n), row)
                H[i, j] += value / 2
                H[j, i] += value / 2
        return H

    def _powers(self, z: Array) -> Array:
        degree = int(self.exponents.max(initial=0))
        return np.asarray(z[:, :, None] ** np.arange(degree + 1))


def substituted(monomials: Monomials, coefficients: Array, S: Array, degree: int) -> dict[tuple[int, ...], float]:
    """Coefficients in y of a polynomial in z = S y: exponents -> coefficient."""
    n = len(S)
    unit = [tuple(int(i == j) for j in range(n)) for i in range(n)]
    linear = [{unit[j]: float(S[i, j]) for j in range(n) if S[i, j] != 0} for i in range(n)]
    products: dict[tuple[int, ...], dict[tuple[int, ...], float]] = {(0,) * n: {(0,) * n: 1.0}}

    def power(exponents: tuple[int, ...]) -> dict[tuple[int, ...], float]:
        if exponents not in products:
            i = next(j for j in range(n) if exponents[j])
            rest = power(tuple(e - (j == i) for j, e in enumerate(exponents)))
            product: dict[tuple[int, ...], float] = {}
            for a, value in rest.items():
                for b, factor in linear[i].items():
                    key = tuple(p + q for p, q in zip(a, b, strict=True))
                    product[key] = product.get(key, 0.0) + value * factor
            products[exponents] = product
        return products[exponents]

    total: dict[tuple[int, ...], float] = {}
    for row, value in zip(monomials.exponents, coefficients, strict=True):
        for key, factor in power(tuple(int(e) for e in row)).items():
            total[key] = total.get(key, 0.0) + float(value) * factor
    return total


def formula(terms: dict[tuple[int, ...], float], names: Sequence[Expression]) -> Expression:
    """Tree of a polynomial whose coefficients are rounded to decimals, which it then stands for exactly.

    It is nested by the powers of the first variable, then of the next: shorter than a sum of monomials.
    """
    rounding = Context(prec=DIGITS)
    decimals = {key: rounding.create_decimal(repr(value)) for key, value in terms.items() if value != 0}
    return _nested(decimals, list(names))


def _nested(terms: dict[tuple[int, ...], Decimal], names: list[Expression]) -> Expression:
    if not names:
        return Number(terms[()])
    by_power: dict[int, dict[tuple[int, ...], Decimal]] = {}
    for key, value in terms.items():
        by_power.setdefault(key[0], {})[key[1:]] = value
    parts = []
    for k in sorted(by_power):
        inner = _nested(by_power[k], names[1:])
        factor = None if k == 0 else names[0] if k == 1 else Power(names[0], Decimal(k))
        parts.append(inner if factor is None else Binary("*", factor, inner))
    return _balanced(parts)


def _balanced(parts: list[Expression]) -> Expression:
    """Sum of the parts as a tree that is only log2 as deep as they are many."""
    if len(parts) == 1:
        return parts[0]
    middle = (len(parts) + 1) // 2
    return Binary("+", _balanced(parts[:middle]), _balanced(parts[middle:]))


def shifted_names(states: Sequence[str], centre: Sequence[Decimal]) -> list[Expression]:
    """What stands for the distances from a centre in a formula in the states themselves."""
    return [
        Name(state) if value == 0 else Binary("-", Name(state), Number(value))
        for state, value in zip(states, centre, strict=True)
    ]
