"""Derivatives of formulas as formulas again, exact, for proofs that need V̇ or Lie derivatives as trees.

Only smooth functions have one here: at the kinks of min, max, abs and where a tree would have to choose a side, and
a proof must not choose. Zeros are dropped and factors of one left out; nothing else is simplified.
"""

from __future__ import annotations

from collections.abc import Mapping
from decimal import Decimal

from roa.loop.expression import Binary, Call, Expression, Lookup, Name, Negate, Number, Power

ZERO, ONE, TWO = Number(Decimal(0)), Number(Decimal(1)), Number(Decimal(2))


class NotSmooth(Exception):
    """The formula has a kink or a jump somewhere, by its construction."""


def derivative(tree: Expression, name: str) -> Expression:
    """Return the partial derivative with respect to a name; other names are constants.

    Raises
    ------
    NotSmooth
        Where a function that has kinks depends on the name.
    """
    match tree:
        case Number():
            return ZERO
        case Name(other):
            return ONE if other == name else ZERO
        case Negate(operand):
            return negated(derivative(operand, name))
        case Binary(op, left, right):
            return _of_two(op, left, right, derivative(left, name), derivative(right, name))
        case Power(base, exponent):
            slope = derivative(base, name)
            return product(product(Number(exponent), power(base, exponent - 1)), slope)
        case Call(function, arguments):
            return _of_call(function, arguments, [derivative(argument, name) for argument in arguments])
    raise NotSmooth


def substituted(tree: Expression, values: Mapping[str, Expression]) -> Expression:
    """Return the tree with names replaced by trees."""
    match tree:
        case Name(name):
            return values.get(name, tree)
        case Negate(operand):
            return Negate(substituted(operand, values))
        case Power(base, exponent):
            return Power(substituted(base, values), exponent)
        case Call(function, arguments):
            return Call(function, tuple(substituted(argument, values) for argument in arguments))
        case Lookup(table, argument, slope):
            return Lookup(table, substituted(argument, values), slope)
        case Number():
            return tree
    return type(tree)(tree.op, substituted(tree.left, values), substituted(tree.right, values))


def total(left: Expression, right: Expression) -> Expression:
    """Return left + right."""
    return right if left == ZERO else left if right == ZERO else Binary("+", left, right)


def product(left: Expression, right: Expression) -> Expression:
    """Return left * right."""
    if ZERO in (left, right):
        return ZERO
    return right if left == ONE else left if right == ONE else Binary("*", left, right)


def negated(tree: Expression) -> Expression:
    """Return -tree."""
    return ZERO if tree == ZERO else tree.operand if isinstance(tree, Negate) else Negate(tree)


def power(base: Expression, exponent: Decimal) -> Expression:
    """Return base ** exponent."""
    return ONE if exponent == 0 else base if exponent == 1 else Power(base, exponent)


def _of_two(op: str, a: Expression, b: Expression, da: Expression, db: Expression) -> Expression:
    match op:
        case "+":
            return total(da, db)
        case "-":
            return total(da, negated(db))
        case "*":
            return total(product(da, b), product(a, db))
    whole = total(product(da, b), negated(product(a, db)))
    return ZERO if whole == ZERO else Binary("/", whole, Power(b, Decimal(2)))


def _of_call(function: str, arguments: tuple[Expression, ...], slopes: list[Expression]) -> Expression:
    if all(slope == ZERO for slope in slopes):
        return ZERO
    if function == "atan2":
        y, x = arguments
        above = total(product(x, slopes[0]), negated(product(y, slopes[1])))
        return Binary("/", above, total(Power(x, Decimal(2)), Power(y, Decimal(2))))
    (x,), (slope,) = (arguments, slopes) if len(arguments) == 1 else ((arguments[0],), (slopes[0],))
    outer = slope_of(function, x)
    if outer is None:
        raise NotSmooth
    return product(outer, slope)


def slope_of(function: str, x: Expression) -> Expression | None:
    """Derivative of a function of one argument; None where it has kinks."""
    square = Power(x, Decimal(2))
    match function:
        case "sin":
            return Call("cos", (x,))
        case "cos":
            return Negate(Call("sin", (x,)))
        case "tan":
            return Binary("+", ONE, Power(Call("tan", (x,)), Decimal(2)))
        case "sinh":
            return Call("cosh", (x,))
        case "cosh":
            return Call("sinh", (x,))
        case "tanh":
            return Binary("-", ONE, Power(Call("tanh", (x,)), Decimal(2)))
        case "exp":
            return Call("exp", (x,))
        case "log":
            return Binary("/", ONE, x)
        case "sqrt":
            return Binary("/", ONE, Binary("*", TWO, Call("sqrt", (x,))))
        case "asin":
            return Binary("/", ONE, Call("sqrt", (Binary("-", ONE, square),)))
        case "acos":
            return Binary("/", Negate(ONE), Call("sqrt", (Binary("-", ONE, square),)))
        case "atan":
            return Binary("/", ONE, Binary("+", ONE, square))
    return None
