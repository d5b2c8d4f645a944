"""From formula trees to a tape: a flat list of elementary operations that one compiled loop can evaluate.

Every number on a tape is an interval that holds the exact decimal of the configuration, so that what is
proved on the tape holds for the loop as it was written and not for its rounded copy.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from enum import IntEnum
from fractions import Fraction
from math import inf, nextafter

import numpy as np
from numpy.typing import NDArray

from roa.loop.expression import Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power
from roa.loop.lookup_table import LookupTable
from roa.loop.model import Loop


class Op(IntEnum):
    """Elementary operations; what each does to values and derivatives stands in `tape_rules`."""

    VARIABLE = 0
    CONSTANT = 1
    ADD = 2
    SUBTRACT = 3
    NEGATE = 4
    MULTIPLY = 5
    RECIPROCAL = 6
    SQUARE = 7
    POWER = 8  # integer exponent
    REAL_POWER = 9
    SIN = 10
    COS = 11
    TAN = 12
    ASIN = 13
    ACOS = 14
    ATAN = 15
    SINH = 16
    COSH = 17
    TANH = 18
    EXP = 19
    LOG = 20
    SQRT = 21
    ABS = 22
    SIGN = 23
    ATAN2 = 24
    MIN = 25
    MAX = 26
    WHERE_NEGATIVE = 27  # the second operand where the first is < 0, else the third
    WHERE_NOT_POSITIVE = 28  # the second operand where the first is <= 0, else the third
    LOOKUP = 29  # the second is the first row of the table, the third its number of pieces


@dataclass(frozen=True)
class Program:
    """A finished tape of t operations in n variables with k outputs.

    Attributes
    ----------
    ops : int64 (t, 4): operation and up to three operands (earlier rows; for POWER the second is the exponent)
    constants : float64 (t, 2): enclosure of a CONSTANT or of the exponent of a REAL_POWER; one for a LOOKUP with kinks
    support : bool (t, n): the variables that each operation depends on
    slots : int64 (t, 1 + n + n(n+1)/2): the numbers of each row's jet that may differ from zero, ascending.
        A jet is the value (slot 0), the n first derivatives and the lower triangle of the second, row by row
    counts : int64 (t, 3): how many of `slots` belong to derivatives up to the order 0, 1, 2
    outputs : int64 (k,): rows of the outputs
    """

    ops: NDArray[np.int64]
    constants: NDArray[np.float64]
    support: NDArray[np.bool_]
    slots: NDArray[np.int64]
    counts: NDArray[np.int64]
    outputs: NDArray[np.int64]


# Operation, up to three operands, and the ends of a constant.
Operation = tuple[int, int, int, int, float, float]


def enclose_number(value: Decimal | Fraction | float) -> tuple[float, float]:
    """Return the smallest interval of floats that holds the exact value."""
    exact = Fraction(value)
    nearest = float(exact)
    if Fraction(nearest) == exact:
        return nearest, nearest
    if Fraction(nearest) < exact:
        return nearest, nextafter(nearest, inf)
    return nextafter(nearest, -inf), nearest


class Tape:
    """Builder of a `Program`: each method appends an operation, or finds it, and returns its row.

    Parameters
    ----------
    variables : int, the number n of variables
    """

    def __init__(self, variables: int) -> None:
        self._n = variables
        self._numbers: dict[Fraction, int] = {}
        self._rows: dict[Operation, int] = {}
        self._tables: dict[LookupTable, int] = {}
        for i in range(variables):
            self._row(Op.VARIABLE, i)

    def variable(self, i: int) -> int:
        """Row of the i-th variable."""
        return i

    def interval(self, low: float, high: float) -> int:
        """Row of a constant known to lie in [low, high]: a new one each time, unless it is a single float.

        Two quantities with the same enclosure need not be equal, and one row stands for one number: its
        product with itself is a square.
        """
        which = 0 if low == high else len(self._rows)
        return self._row(Op.CONSTANT, which, low=float(low) + 0.0, high=float(high) + 0.0)  # + 0.0: no negative zero

    def number(self, value: Decimal | Fraction | float) -> int:
        """Row of an exact number; equal numbers share a row."""
        exact = Fraction(value)
        if exact not in self._numbers:
            self._numbers[exact] = self.interval(*enclose_number(exact))
        return self._numbers[exact]

    def add(self, a: int, b: int) -> int:
        """Row of a + b."""
        return b if self.is_zero(a) else a if self.is_zero(b) else self._row(Op.ADD, min(a, b), max(a, b))

    def subtract(self, a: int, b: int) -> int:
        """Row of a - b."""
        return a if self.is_zero(b) else self.negate(b) if self.is_zero(a) else self._row(Op.SUBTRACT, a, b)

    def negate(self, a: int) -> int:
        """Row of -a."""
        return self._row(Op.NEGATE, a)

    def multiply(self, a: int, b: int) -> int:
        """Row of a b; one factor twice is a square."""
        return self._row(Op.SQUARE, a) if a == b else self._row(Op.MULTIPLY, min(a, b), max(a, b))

    def divide(self, a: int, b: int) -> int:
        """Row of a / b."""
        return self.multiply(a, self._row(Op.RECIPROCAL, b))

    def total(self, rows: Iterable[int]) -> int:
        """Row of the sum of the rows."""
        result = self.number(0.0)
        for row in rows:
            result = self.add(result, row)
        return result

    def weighted(self, weights: Iterable[int], rows: Iterable[int]) -> int:
        """Row of the sum of weight times row."""
        return self.total(
            self.multiply(weight, row)
            for weight, row in zip(weights, rows, strict=True)
            if not (self.is_zero(weight) or self.is_zero(row))
        )

    def expression(self, tree: Expression, names: Mapping[str, int]) -> int:
        """Row of a formula whose names stand for the given rows."""
        match tree:
            case Number(value):
                return self.number(value)
            case Name(name):
                return names[name]
            case Negate(operand):
                return self.negate(self.expression(operand, names))
            case Binary(op, left, right):
                operation = {"+": self.add, "-": self.subtract, "*": self.multiply, "/": self.divide}[op]
                return operation(self.expression(left, names), self.expression(right, names))
            case Power(base, exponent):
                return self.power(self.expression(base, names), exponent)
            case Call("where", (Compare(op, left, right), first, second)):
                difference = self.subtract(self.expression(left, names), self.expression(right, names))
                return self._where(op, difference, self.expression(first, names), self.expression(second, names))
            case Lookup(table, argument, slope):
                if slope:
                    raise AssertionError("the slope of a table is for the kernel alone")
                return self._lookup(table, self.expression(argument, names))
            case Call(function, arguments):
                return self.call(function, [self.expression(argument, names) for argument in arguments])
        raise AssertionError(tree)

    def loop(self, loop: Loop, states: Iterable[int], varying: Mapping[str, int] | None = None) -> dict[str, int]:
        """Rows of all names of a loop, with its states, and parameters that vary, at the given rows."""
        names = dict(zip(loop.states, states, strict=True))
        names.update({name: self.number(parameter.value) for name, parameter in loop.parameters.items()})
        names.update(varying or {})
        for name, tree in loop.signals.items():
            names[name] = self.expression(tree, names)
        return names

    def operations(self) -> list[Operation]:
        """Every row so far."""
        return list(self._rows)

    def program(self, outputs: Iterable[int]) -> Program:
        """Freeze the tape, with the given rows as its outputs."""
        chosen = np.array(list(outputs), dtype=np.int64)  # first: a generator may still append rows
        keys = list(self._rows)
        support = np.zeros((len(keys), self._n), dtype=bool)
        for row, (op, *operands, _, _) in enumerate(keys):
            if op == Op.VARIABLE:
                support[row, operands[0]] = True
            else:
                for operand in operands[: _operands(op)]:
                    support[row] |= support[operand]
        lower, left = np.tril_indices(self._n)
        second = support[:, lower] & support[:, left]
        used = np.concatenate([np.ones((len(keys), 1), dtype=bool), support, second], axis=1)
        return Program(
            ops=np.array([key[:4] for key in keys], dtype=np.int64),
            constants=np.array([key[4:] for key in keys]),
            support=support,
            slots=np.argsort(~used, axis=1, kind="stable"),
            counts=np.cumsum(np.stack([used[:, 0], support.sum(axis=1), second.sum(axis=1)], axis=1), axis=1),
            outputs=chosen,
        )

    def _lookup(self, table: LookupTable, row: int) -> int:
        first, kinked = self._table(table), 1.0 if table.kind == "linear" else 0.0
        return self._row(Op.LOOKUP, row, first, len(table.pieces), kinked, kinked)

    def _table(self, table: LookupTable) -> int:
        """First row of a table, in the order that `table_rules` reads; its rows stand for no other numbers."""
        if table not in self._tables:
            self._tables[table] = len(self._rows)
            low, high = (table.x[0], table.x[-1]) if table.refuses else (Decimal("-inf"), Decimal("inf"))
            for piece in table.pieces:
                edge = low if piece.edge is None else piece.edge
                for number in (edge, piece.origin, *piece.coefficients):
                    self._own_constant(number)
            self._own_constant(high)
        return self._tables[table]

    def _own_constant(self, number: Decimal | Fraction) -> None:
        infinite = isinstance(number, Decimal) and number.is_infinite()
        low, high = (float(number), float(number)) if infinite else enclose_number(number)
        self._row(Op.CONSTANT, -1 - len(self._rows), low=low, high=high)

    def _row(self, op: Op, a: int = 0, b: int = 0, c: int = 0, low: float = 0.0, high: float = 0.0) -> int:
        return self._rows.setdefault((int(op), a, b, c, low, high), len(self._rows))

    def is_zero(self, row: int) -> bool:
        """Whether a row is the number zero."""
        return self._rows.get((int(Op.CONSTANT), 0, 0, 0, 0.0, 0.0)) == row

    def power(self, base: int, exponent: Decimal) -> int:
        """Row of a power with a constant exponent."""
        if exponent != exponent.to_integral_value():
            return self.real_power(base, *enclose_number(exponent))
        k = int(exponent)
        return self.number(1.0) if k == 0 else base if k == 1 else self._row(Op.POWER, base, k)

    def _where(self, op: str, difference: int, first: int, second: int) -> int:
        match op:
            case "<":
                return self._row(Op.WHERE_NEGATIVE, difference, first, second)
            case "<=":
                return self._row(Op.WHERE_NOT_POSITIVE, difference, first, second)
            case ">":
                return self._row(Op.WHERE_NOT_POSITIVE, difference, second, first)
            case _:
                return self._row(Op.WHERE_NEGATIVE, difference, second, first)

    def real_power(self, base: int, low: float, high: float) -> int:
        """Row of a power whose exponent is known to lie in [low, high]."""
        return self._row(Op.REAL_POWER, base, low=low, high=high)

    def call(self, function: str, arguments: list[int]) -> int:
        """Row of a function of rows; `where` has rows of its own."""
        match function, arguments:
            case "clip", [x, low, high]:
                return self._row(Op.MIN, self._row(Op.MAX, x, low), high)
            case "deadzone", [x, width]:
                return self.subtract(x, self.call("clip", [x, self.negate(width), width]))
        return self._row(Op[function.upper()], *arguments)


def _operands(op: int) -> int:
    """How many of the three operand columns name rows."""
    if op <= Op.CONSTANT:
        return 0
    if op in (Op.ADD, Op.SUBTRACT, Op.MULTIPLY, Op.ATAN2, Op.MIN, Op.MAX):
        return 2
    return 3 if op in (Op.WHERE_NEGATIVE, Op.WHERE_NOT_POSITIVE) else 1
