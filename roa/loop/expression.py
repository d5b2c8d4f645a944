"""The tree of a formula: the only form in which formulas travel between rooms.

A tree is made by `roa.loop.formula.parse` from text and never evaluated as Python. Numbers keep
their exact decimal value, so that a proof can enclose them; everything else is structure.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal

from roa.loop.lookup_table import LookupTable

# Functions of the formula language with the number of arguments that each takes.
# `min` and `max` take two or more; the tree holds them as nested pairs.
FUNCTIONS: dict[str, int] = {
    "sin": 1, "cos": 1, "tan": 1, "asin": 1, "acos": 1, "atan": 1, "atan2": 2,
    "sinh": 1, "cosh": 1, "tanh": 1, "exp": 1, "log": 1, "sqrt": 1,
    "abs": 1, "sign": 1, "min": 2, "max": 2, "clip": 3, "deadzone": 2, "where": 3,
}  # fmt: skip


@dataclass(frozen=True)
class Number:
    """A constant with its exact decimal value."""

    value: Decimal


@dataclass(frozen=True)
class Name:
    """A state, a parameter or a signal."""

    name: str


@dataclass(frozen=True)
class Negate:
    """Minus the operand."""

    operand: Expression


@dataclass(frozen=True)
class Binary:
    """`left op right` with op one of + - * /."""

    op: str
    left: Expression
    right: Expression


@dataclass(frozen=True)
class Power:
    """`base ** exponent` with a constant exponent, at most 16 in size."""

    base: Expression
    exponent: Decimal


@dataclass(frozen=True)
class Compare:
    """`left op right` with op one of < <= > >=; only as the first argument of `where`."""

    op: str
    left: Expression
    right: Expression


@dataclass(frozen=True)
class Call:
    """A function of `FUNCTIONS`.

    clip(x, lo, hi) = min(max(x, lo), hi); deadzone(x, w) = x - clip(x, -w, w);
    sign(0) = 0; where(condition, a, b) is a where the comparison holds, else b.
    """

    function: str
    arguments: tuple[Expression, ...]


@dataclass(frozen=True)
class Lookup:
    """The curve of a look-up table at the argument, or its slope there (which no formula can ask for itself)."""

    table: LookupTable
    argument: Expression
    slope: bool = False


Expression = Number | Name | Negate | Binary | Power | Compare | Call | Lookup


def children(node: Expression) -> tuple[Expression, ...]:
    """Return the direct operands of a node, left to right."""
    match node:
        case Negate(operand):
            return (operand,)
        case Binary(_, left, right) | Compare(_, left, right):
            return (left, right)
        case Power(base, _):
            return (base,)
        case Lookup(_, argument):
            return (argument,)
        case Call(_, arguments):
            return arguments
    return ()


def walk(node: Expression) -> Iterator[Expression]:
    """Yield the node and everything below it, without recursion."""
    pending = [node]
    while pending:
        current = pending.pop()
        yield current
        pending.extend(reversed(children(current)))


def names_in(node: Expression) -> set[str]:
    """Return every name that the tree uses."""
    return {part.name for part in walk(node) if isinstance(part, Name)}
