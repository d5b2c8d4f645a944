"""Derivatives of the rows of a tape as rows of the same tape: V̇ itself then has enclosures and derivatives.

A kink or a jump that depends on the variables has no derivative here; the functions between which it switches do,
but which of them counts at the kink is a question that a row cannot answer.
"""

from __future__ import annotations

from collections.abc import Mapping
from decimal import Decimal
from fractions import Fraction

from roa.kernel.tape import Op, Operation, Tape, enclose_number


class NotSmoothError(Exception):
    """A row that depends on the variables by abs, sign, min, max or where, and by what is made of them."""


def partials(tape: Tape, row: int, bases: list[int]) -> list[int]:
    """Rows of the derivatives of a row with respect to the rows `bases`, each taken as independent of the others.

    Raises
    ------
    NotSmoothError
    """
    zero, one = tape.number(0), tape.number(1)
    return [rate(tape, row, {base: one if base == chosen else zero for base in bases}) for chosen in bases]


def rate(tape: Tape, row: int, rates: Mapping[int, int]) -> int:
    """Row of the rate of change of a row, given those of the rows on which it depends; other variables stand still.

    Raises
    ------
    NotSmoothError
    """
    zero = tape.number(0)
    known: dict[int, int] = {}
    operations = tape.operations()
    for t in sorted(_ancestors(operations, row, rates)):
        op, a, b, c, low, high = operations[t]
        if t in rates:
            known[t] = rates[t]
        elif op in (Op.VARIABLE, Op.CONSTANT):
            known[t] = zero
        elif op in (Op.ADD, Op.SUBTRACT, Op.MULTIPLY, Op.ATAN2):
            known[t] = _two(tape, op, a, b, known[a], known[b])
        elif all(tape.is_zero(known[operand]) for operand in _operands(op, a, b, c)):
            known[t] = zero
        elif op == Op.NEGATE:
            known[t] = tape.negate(known[a])
        else:
            known[t] = _times(tape, _slope(tape, op, t, a, b, (low, high)), known[a])
    return known[row]


def _operands(op: int, a: int, b: int, c: int) -> tuple[int, ...]:
    if op <= Op.CONSTANT:
        return ()
    if op in (Op.ADD, Op.SUBTRACT, Op.MULTIPLY, Op.ATAN2, Op.MIN, Op.MAX):
        return a, b
    return (a, b, c) if op in (Op.WHERE_NEGATIVE, Op.WHERE_NOT_POSITIVE) else (a,)


def _ancestors(operations: list[Operation], row: int, stops: Mapping[int, int]) -> set[int]:
    """The row and all rows that it is made of, none beyond those with a given rate."""
    found, pending = set(), [row]
    while pending:
        t = pending.pop()
        if t in found:
            continue
        found.add(t)
        if t not in stops:
            pending.extend(_operands(*operations[t][:4]))
    return found


def _times(tape: Tape, a: int, b: int) -> int:
    if tape.is_zero(a) or tape.is_zero(b):
        return tape.number(0)
    one = tape.number(1)
    return b if a == one else a if b == one else tape.multiply(a, b)


def _two(tape: Tape, op: int, a: int, b: int, da: int, db: int) -> int:
    if op == Op.ADD:
        return tape.add(da, db)
    if op == Op.SUBTRACT:
        return tape.subtract(da, db)
    if op == Op.MULTIPLY:
        return tape.add(_times(tape, da, b), _times(tape, a, db))
    if tape.is_zero(da) and tape.is_zero(db):
        return tape.number(0)
    turning = tape.subtract(_times(tape, b, da), _times(tape, a, db))  # atan2(y, x), y = row a and x = row b
    return tape.divide(turning, tape.add(tape.multiply(a, a), tape.multiply(b, b)))


def _slope(tape: Tape, op: int, t: int, a: int, k: int, exponent: tuple[float, float]) -> int:
    """Row of f'(u) for row t = f(row a)."""
    one = tape.number(1)
    match op:
        case Op.RECIPROCAL:
            return tape.negate(tape.multiply(t, t))
        case Op.SQUARE:
            return tape.multiply(tape.number(2), a)
        case Op.POWER:
            return _times(tape, tape.number(k), tape.power(a, Decimal(k - 1)))
        case Op.REAL_POWER:
            return _real_power(tape, a, exponent)
        case Op.SIN:
            return tape.call("cos", [a])
        case Op.COS:
            return tape.negate(tape.call("sin", [a]))
        case Op.TAN:
            return tape.add(one, tape.multiply(t, t))
        case Op.ASIN | Op.ACOS:
            inverse = tape.divide(one, tape.call("sqrt", [tape.subtract(one, tape.multiply(a, a))]))
            return inverse if op == Op.ASIN else tape.negate(inverse)
        case Op.ATAN:
            return tape.divide(one, tape.add(one, tape.multiply(a, a)))
        case Op.SINH:
            return tape.call("cosh", [a])
        case Op.COSH:
            return tape.call("sinh", [a])
        case Op.TANH:
            return tape.subtract(one, tape.multiply(t, t))
        case Op.EXP:
            return t
        case Op.LOG:
            return tape.divide(one, a)
        case Op.SQRT:
            return tape.divide(one, tape.multiply(tape.number(2), t))
    raise NotSmoothError(Op(op).name.lower())


def _real_power(tape: Tape, a: int, exponent: tuple[float, float]) -> int:
    """p u^(p-1), where the exponent is known to lie in an interval: u^(p-1) lies between the powers at its ends."""
    low, high = (enclose_number(Fraction(end) - 1) for end in exponent)
    return tape.multiply(tape.interval(*exponent), tape.real_power(a, low[0], high[1]))
