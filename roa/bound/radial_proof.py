"""Proof that V̇ < 0 on {0 < V <= c} for cubic loops of many states, with the radius eliminated.

In coordinates z with V = z'Fz and an equilibrium that is a float exactly, V̇ is a polynomial whose coefficients are
collected in exact rationals: V̇(ρd) = ρ²(q2(d) + ρ q3(d) + ρ² q4(d)) along each direction d. With v = d'Fd and
ρ = s √(c/v), 0 < s <= 1, the sign of V̇ is that of

    Φ(s) = q2 v + s √(c v) q3 + s² c q4.

Every direction is taken once: the faces d_k = 1 of the cube, and both signs of q3. For one d, Φ is quadratic in s,
and below zero on [a, b] where its three Bernstein coefficients are: Φ(a), Φ(b) and the one between them,
q2 v + (a + b)/2 √(c v) q3 + a b c q4. Each is a function of n - 1 numbers alone, which branch and bound takes in far
fewer boxes than V̇ in n. Where the one in between fails, the range of s is halved.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.exact_polynomial import (
    Polynomial,
    affine,
    expand,
    homogeneous,
    polynomial_names,
    product,
    scaled,
    total,
)
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.branch_and_bound import Answer, Search, negative_on_levels
from roa.kernel.tape import Program, Tape

Array = NDArray[np.float64]

DEGREE = 3  # of the dynamics
TINY = 1e-14  # coefficients that are so much smaller than the largest go into one interval
HALVINGS = 6  # of the range of s
TRIAL, LEAST = 0.05, 100  # part of the budget, and least boxes a face, for the middle coefficient before a halving


@dataclass(frozen=True)
class Radial:
    """V̇ and V as exact polynomials in z.

    Attributes
    ----------
    parts : the homogeneous parts of V̇ of degree 2, 3 and 4
    V : homogeneous of degree 2
    """

    n: int
    parts: tuple[Polynomial, Polynomial, Polynomial]
    V: Polynomial

    def prove(self, c: float, budget: int) -> Search:
        """Try to prove V̇ < 0 on {0 < V <= c}; never refuted, since a witness is for other searches to find."""
        run = _Run(self, c, budget)
        proved = (
            run.is_negative(0, 0, budget)
            and run.is_negative(1, 1, budget)
            and run.between(Fraction(0), Fraction(1), HALVINGS)
        )
        return Search(Answer.PROVED if proved else Answer.UNDECIDED, run.boxes, None, 0.0 if proved else 1.0)


def radial(V: Quadratic, centre: Array, T: Array) -> Radial | None:
    """Collect V̇ in z, x = centre + Tz, where the loop is cubic at most and rests at the float centre.

    Parameters
    ----------
    V : Quadratic
    centre : float64 (n,), known to be the equilibrium exactly
    T : float64 (n, n)
    """
    loop, n = V.loop, V.loop.n
    rows = [[Fraction(float(entry)) for entry in row] for row in T]
    offsets = [affine(Fraction(0), row) for row in rows]
    states = [affine(Fraction(float(x)), row) for x, row in zip(centre, rows, strict=True)]
    names = polynomial_names(loop, states, DEGREE)
    f = [expand(tree, names, n, DEGREE) for tree in loop.dynamics]
    P = V.exact or [[Fraction(float(entry)) for entry in row] for row in V.P]
    Py = [_combined(row, offsets) for row in P]
    value = total(_product(offset, entry) for offset, entry in zip(offsets, Py, strict=True))
    if any(entry is None for entry in f):
        return None
    decrease = total(_product(scaled(entry, Fraction(2)), g) for entry, g in zip(Py, f, strict=True))
    assert value is not None
    assert decrease is not None
    if homogeneous(decrease, 0) or homogeneous(decrease, 1):
        return None  # the centre is no equilibrium
    return Radial(n, (homogeneous(decrease, 2), homogeneous(decrease, 3), homogeneous(decrease, 4)), value)


def _product(a: Polynomial | None, b: Polynomial | None) -> Polynomial | None:
    return product(a, b, DEGREE + 1)


def _combined(weights: object, polynomials: list[Polynomial]) -> Polynomial | None:
    return total(scaled(p, w) for w, p in zip(weights, polynomials, strict=True))  # type: ignore[call-overload]


class _Run:
    """One attempt, and the boxes that it has used."""

    def __init__(self, radial: Radial, c: float, budget: int) -> None:
        self._radial, self._budget = radial, budget
        self._c = Fraction(c)
        self.boxes = 0

    def between(self, a: Fraction, b: Fraction, halvings: int) -> bool:
        """Whether Φ < 0 for a < s < b, where it is at both ends."""
        left = self._budget - self.boxes
        trial = min(left, max(int(TRIAL * left), LEAST * self._radial.n))
        if self.is_negative((a + b) / 2, a * b, left if halvings == 0 else trial):
            return True
        middle = (a + b) / 2
        if halvings == 0 or not self.is_negative(middle, middle**2, self._budget - self.boxes):
            return False
        return self.between(a, middle, halvings - 1) and self.between(middle, b, halvings - 1)

    def is_negative(self, first: Fraction | int, second: Fraction | int, budget: int) -> bool:
        """Whether q2 v + first √(c v) q3 + second c q4 < 0 in all directions."""
        for k in range(self._radial.n):
            for sign in (1, -1) if first and self._radial.parts[1] else (1,):
                if budget <= 0:
                    return False
                program = self._program(k, Fraction(first) * sign, Fraction(second))
                m = self._radial.n - 1
                everywhere = (-np.inf, np.inf)
                found = negative_on_levels(program, -np.ones(m), np.ones(m), everywhere, -np.ones(m), budget)
                self.boxes += found.boxes
                budget -= found.boxes
                if found.answer is not Answer.PROVED:
                    return False
        return True

    def _program(self, k: int, first: Fraction, second: Fraction) -> Program:
        """Tape of the function on the face d_k = 1, in the other n - 1 numbers."""
        r = self._radial
        q2, q3, q4 = r.parts
        tape = Tape(r.n - 1)
        d = [tape.number(1) if i == k else i - (i > k) for i in range(r.n)]
        # Multiplied out with c in it: what cancels between q2 v and c q4 is gone before anything is enclosed.
        even = total([product(q2, r.V, DEGREE + 1), scaled(q4, second * self._c)])
        terms = [_row(tape, even or {}, d)]
        if first and q3:
            root = tape.call("sqrt", [tape.multiply(tape.number(self._c), _row(tape, r.V, d))])
            terms.append(tape.multiply(root, _row(tape, scaled(q3, first) or {}, d)))
        return tape.program([tape.total(terms), tape.number(0)])


def _row(tape: Tape, polynomial: Polynomial, d: list[int]) -> int:
    """Row of a polynomial at |d_i| <= 1; what is tiny there goes into one interval."""
    largest = max((abs(value) for value in polynomial.values()), default=Fraction(0))
    rest, terms = Fraction(0), []
    for powers, value in sorted(polynomial.items()):
        if abs(value) <= Fraction(TINY) * largest:
            rest += abs(value)
            continue
        row = tape.number(1)
        for i, power in enumerate(powers):
            if power:
                row = _times(tape, row, tape.multiply(d[i], d[i]) if power == 2 else tape.power(d[i], Decimal(power)))
        terms.append(_times(tape, tape.number(value), row))
    if rest:
        width = np.nextafter(float(rest), np.inf)
        terms.append(tape.interval(-width, width))
    return tape.total(terms)


def _times(tape: Tape, a: int, b: int) -> int:
    one = tape.number(1)
    return b if a == one else a if b == one else tape.multiply(a, b)
