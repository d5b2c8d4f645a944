"""Trees of formulas back to text, with as few brackets as the rules of precedence need."""

from __future__ import annotations

from decimal import Context, Decimal

from roa.loop.expression import Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power

_COMPARISON, _SUM, _PRODUCT, _SIGN, _POWER, _ATOM = range(6)
_PRECEDENCE = {"+": _SUM, "-": _SUM, "*": _PRODUCT, "/": _PRODUCT}
_EXACT = Context(prec=300_000)  # more digits than a configuration can hold: nothing is rounded


def to_text(tree: Expression) -> str:
    """Write a tree as a formula; `roa.loop.formula.parse` reads it back as the same tree."""
    return _written(tree)[0]


def decimal_text(value: Decimal) -> str:
    """Write a decimal in the one way that equal values share: 1.20 as 1.2, 3E+2 as 300."""
    if not value:
        return "0"
    shortest = value.normalize(_EXACT)
    return f"{shortest:f}" if -7 < shortest.adjusted() < 16 else str(shortest).replace("E+", "e").replace("E", "e")


def _written(node: Expression) -> tuple[str, int]:
    match node:
        case Number(value):
            return decimal_text(value), _ATOM if value >= 0 else _SIGN
        case Name(name):
            return name, _ATOM
        case Negate(operand):
            return f"-{_bracketed(operand, _SIGN)}", _SIGN
        case Binary(op, left, right):
            level = _PRECEDENCE[op]
            space = " " if level == _SUM else ""
            # the right operand needs brackets at equal precedence too: a - (b - c)
            return f"{_bracketed(left, level)}{space}{op}{space}{_bracketed(right, level + 1)}", level
        case Power(base, exponent):
            return f"{_bracketed(base, _ATOM)}**{decimal_text(exponent)}", _POWER
        case Compare(op, left, right):
            return f"{_bracketed(left, _SUM)} {op} {_bracketed(right, _SUM)}", _COMPARISON
        case Lookup(table, argument, slope):
            # The slope has a name that no formula can write.
            return f"{'slope of ' if slope else ''}lookup({table.name}, {to_text(argument)})", _ATOM
        case Call(function, arguments):
            return f"{function}({', '.join(to_text(argument) for argument in arguments)})", _ATOM


def _bracketed(node: Expression, lowest: int) -> str:
    text, precedence = _written(node)
    return text if precedence >= lowest else f"({text})"
