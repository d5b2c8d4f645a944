"""Taylor coefficients in time of a trajectory, as formulas of its start: x(t) = x0 + x1 t + x2 t² + …, on a tape.

With x' = f(x) the coefficients follow from each other, (k + 1) x_{k+1} = the k-th coefficient of f(x(t)), and those of
f from those of x by one rule for each operation: the product rule of series, and for a function y = g(a) the
coefficients of its differential equation y' = g'(a) a'. What does not depend on the states is a constant, and so are
signals that are held through the time in question: their rows are given.
Source: R. E. Moore, Interval Analysis, 1966; A. Griewank, A. Walther, Evaluating Derivatives, chapter 13 (from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from decimal import Decimal
from fractions import Fraction

from roa.kernel.tape import Tape
from roa.loop.expression import Binary, Call, Expression, Name, Negate, Number, Power, children
from roa.loop.model import Loop

_ONE, _TWO = Number(Decimal(1)), Number(Decimal(2))


def _square(a: Expression) -> Expression:
    return Binary("*", a, a)


# g'(a) as a formula in a and y = g(a).
_SLOPES: dict[str, Callable[[Expression, Expression], Expression]] = {
    "sin": lambda a, _: Call("cos", (a,)),
    "cos": lambda a, _: Negate(Call("sin", (a,))),
    "tan": lambda _, y: Binary("+", _ONE, _square(y)),
    "asin": lambda a, _: Binary("/", _ONE, Call("sqrt", (Binary("-", _ONE, _square(a)),))),
    "acos": lambda a, _: Negate(Binary("/", _ONE, Call("sqrt", (Binary("-", _ONE, _square(a)),)))),
    "atan": lambda a, _: Binary("/", _ONE, Binary("+", _ONE, _square(a))),
    "sinh": lambda a, _: Call("cosh", (a,)),
    "cosh": lambda a, _: Call("sinh", (a,)),
    "tanh": lambda _, y: Binary("-", _ONE, _square(y)),
    "exp": lambda _, y: y,
    "log": lambda a, _: Binary("/", _ONE, a),
    "sqrt": lambda _, y: Binary("/", _ONE, Binary("*", _TWO, y)),
}


class NotSmooth(Exception):
    """A formula has no Taylor series: it has a kink or a jump where the states may be."""


class FlowSeries:
    """The coefficients of one trajectory.

    Parameters
    ----------
    tape : Tape
    loop : Loop
    states : rows of the start, n
    given : rows of the signals that are held

    Raises
    ------
    NotSmooth
        Where a signal that is not held, or the dynamics, has a kink that depends on the states.
    """

    def __init__(self, tape: Tape, loop: Loop, states: list[int], given: Mapping[str, int]) -> None:
        self._tape, self._loop = tape, loop
        self._signals = {name: tree for name, tree in loop.signals.items() if name not in given}
        self._constants = {name: tape.number(parameter.value) for name, parameter in loop.parameters.items()}
        self._constants |= given
        self._known: dict[Expression, list[int]] = {
            Name(name): [row] for name, row in zip(loop.states, states, strict=True)
        }
        self._fixed: dict[Expression, bool] = {}
        self._zero = tape.number(0)

    def coefficient(self, k: int) -> list[int]:
        """Rows of the coefficients of t^k of the n states."""
        for order in range(len(self._known[Name(self._loop.states[0])]), k + 1):
            rows = [self._at(tree, order - 1) for tree in self._loop.dynamics]
            for name, row in zip(self._loop.states, rows, strict=True):
                self._known[Name(name)].append(self._scaled(row, Fraction(1, order)))
        return [self._known[Name(name)][k] for name in self._loop.states]

    def _scaled(self, row: int, factor: Fraction) -> int:
        return row if factor == 1 else self._tape.multiply(self._tape.number(factor), row)

    def _at(self, tree: Expression, k: int) -> int:
        """Row of the k-th coefficient of a formula; those of the states up to k are there."""
        if isinstance(tree, Name) and tree.name in self._signals:
            return self._at(self._signals[tree.name], k)
        if self._is_constant(tree):
            return self._tape.expression(tree, self._names(tree)) if k == 0 else self._zero
        known = self._known.setdefault(tree, [])
        while len(known) <= k:
            known.append(self._next(tree, len(known)))
        return known[k]

    def _names(self, tree: Expression) -> dict[str, int]:
        """Rows of the names of a formula that is constant in time."""
        rows = dict(self._constants)
        for name, signal in self._signals.items():
            if self._is_constant(signal):
                rows[name] = self._tape.expression(signal, rows)
        return rows

    def _is_constant(self, tree: Expression) -> bool:
        if tree not in self._fixed:
            if isinstance(tree, Name):
                signal = self._signals.get(tree.name)
                self._fixed[tree] = tree.name in self._constants or (signal is not None and self._is_constant(signal))
            else:
                self._fixed[tree] = all(self._is_constant(part) for part in children(tree))
        return self._fixed[tree]

    def _next(self, tree: Expression, k: int) -> int:
        tape = self._tape
        match tree:
            case Negate(operand):
                return tape.negate(self._at(operand, k))
            case Binary("+", left, right):
                return tape.add(self._at(left, k), self._at(right, k))
            case Binary("-", left, right):
                return tape.subtract(self._at(left, k), self._at(right, k))
            case Binary("*", left, right):
                return self._convolved(left, right, k)
            case Binary("/", left, right):
                return self._quotient(tree, left, right, k)
            case Power(base, exponent):
                return self._power(Power(base, exponent), base, exponent, k)
            case Call(function, (operand,)) if function in _SLOPES:
                return self._function(tree, function, operand, k)
        word = tree.function if isinstance(tree, Call) else "a look-up table"
        raise NotSmooth(f"{word} stands in the continuous part")

    def _product(self, a: int, b: int) -> int:
        """Row of a b, without work where one is the row of zero."""
        return self._zero if self._zero in (a, b) else self._tape.multiply(a, b)

    def _convolved(self, left: Expression, right: Expression, k: int) -> int:
        if left == right:  # a square: each mixed product once, twice its size
            rows = [
                self._scaled(self._product(self._at(left, j), self._at(left, k - j)), Fraction(1 if 2 * j == k else 2))
                for j in range(k // 2 + 1)
            ]
            return self._tape.total(rows)
        return self._tape.total(self._product(self._at(left, j), self._at(right, k - j)) for j in range(k + 1))

    def _quotient(self, tree: Expression, left: Expression, right: Expression, k: int) -> int:
        known = self._known[tree]
        rest = self._tape.total(self._product(known[j], self._at(right, k - j)) for j in range(k))
        return self._tape.divide(self._tape.subtract(self._at(left, k), rest), self._at(right, 0))

    def _power(self, tree: Power, base: Expression, exponent: Decimal, k: int) -> int:
        if exponent == exponent.to_integral_value() and exponent >= 2:
            # By products: the recursion for general exponents divides by the base, which may be zero.
            half = Power(base, Decimal(exponent // 2)) if exponent >= 4 else base
            square = Binary("*", half, half)
            return self._at(square if exponent % 2 == 0 else Binary("*", square, base), k)
        if exponent in (0, 1):
            return self._at(base, k) if exponent == 1 else self._tape.number(1 if k == 0 else 0)
        if k == 0:
            return self._tape.expression(Power(Name("base"), exponent), {"base": self._at(base, 0)})
        known = self._known[tree]
        rows = [
            self._scaled(self._product(self._at(base, j), known[k - j]), (Fraction(exponent) * j - (k - j)) / k)
            for j in range(1, k + 1)
        ]
        return self._tape.divide(self._tape.total(rows), self._at(base, 0))

    def _function(self, tree: Expression, function: str, operand: Expression, k: int) -> int:
        """y = g(a): k y_k is the sum of j a_j s_{k-j} with s the series of g'(a), a formula in a and y."""
        if k == 0:
            return self._tape.expression(Call(function, (Name("a"),)), {"a": self._at(operand, 0)})
        slope = _SLOPES[function](operand, tree)
        rows = [
            self._scaled(self._product(self._at(operand, j), self._at(slope, k - j)), Fraction(j, k))
            for j in range(1, k + 1)
        ]
        return self._tape.total(rows)
