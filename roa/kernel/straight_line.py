"""Formulas as straight-line code: the right-hand side of the generated module.

Every distinct subtree becomes one assignment. Subtrees of numbers and parameters alone become
*constants*: entries of an array that is filled before the sweep, so that a changed gain uses the
module that is compiled already.
"""

from __future__ import annotations

from collections.abc import Mapping
from decimal import Decimal

from roa.loop.expression import Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power, children
from roa.loop.lookup_table import LookupTable
from roa.loop.model import Loop


class StraightLine:
    """Assignments that evaluate trees of a loop, and the constants that they use.

    Attributes
    ----------
    lines : list of str, Python assignments in order
    constants : list of trees over parameters and numbers; the code calls them c0, c1, …
    functions : set of str, the names from `vector_math` that the lines call
    tables : look-up tables in the order in which the lines call them lookup0, lookup1, … or slope0, slope1, …

    Parameters
    ----------
    loop : Loop
    given : names whose values are variables already, such as the signals that are held
    """

    def __init__(self, loop: Loop, given: Mapping[Expression, str] | None = None) -> None:
        self.lines: list[str] = []
        self.constants: list[Expression] = []
        self.functions: set[str] = set()
        self.tables: list[LookupTable] = []
        self._signals: Mapping[str, Expression] = loop.signals
        self._parameters = frozenset(loop.parameters)
        self._variables: dict[Expression, str] = {Name(s): f"x{i}" for i, s in enumerate(loop.states)}
        self._variables |= given or {}
        self._constant: dict[Expression, bool] = dict.fromkeys(given or {}, False)

    def share_with(self, other: StraightLine) -> None:
        """Use the constants, functions and tables of another code of the same module, and add to them."""
        self.constants, self.functions, self.tables = other.constants, other.functions, other.tables

    def variable(self, tree: Expression) -> str:
        """Return the variable that holds the tree's value, appending the lines that compute it."""
        known = self._variables.get(tree)
        if known is not None:
            return known
        if self._is_constant(tree):
            name = f"c{len(self.constants)}"
            self.constants.append(tree)
        elif isinstance(tree, Name):
            name = self.variable(self._signals[tree.name])
        else:
            name = self.assign(self._operation(tree))
        self._variables[tree] = name
        return name

    def assign(self, text: str) -> str:
        """Append an assignment and return its variable."""
        name = f"v{len(self.lines)}"
        self.lines.append(f"{name} = {text}")
        return name

    def _is_constant(self, tree: Expression) -> bool:
        known = self._constant.get(tree)
        if known is None:
            if isinstance(tree, Name):
                signal = self._signals.get(tree.name)
                known = tree.name in self._parameters or (signal is not None and self._is_constant(signal))
            else:
                known = all(self._is_constant(part) for part in children(tree))
            self._constant[tree] = known
        return known

    def _operation(self, tree: Expression) -> str:
        match tree:
            case Negate(operand):
                return f"-{self.variable(operand)}"
            case Binary("/", left, right) if self._is_constant(right):
                # A division costs several multiplications and is not pipelined.
                return f"{self.variable(left)} * {self.variable(Binary('/', Number(Decimal(1)), right))}"
            case Binary(op, left, right):
                return f"{self.variable(left)} {op} {self.variable(right)}"
            case Power(base, exponent):
                return self._power(self.variable(base), exponent)
            case Compare(op, left, right):
                return f"{self.variable(left)} {op} {self.variable(right)}"
            case Call(function, arguments):
                return self._call(function, [self.variable(a) for a in arguments])
            case Lookup(table, argument, slope):
                if table not in self.tables:
                    self.tables.append(table)
                return f"{'slope' if slope else 'lookup'}{self.tables.index(table)}({self.variable(argument)})"
        raise AssertionError(f"no such node: {tree!r}")

    def _power(self, base: str, exponent: Decimal) -> str:
        size = abs(exponent)
        if size == int(size):
            text = _integer_power(base, int(size))
        elif size * 2 == int(size * 2):
            whole = int(size)
            text = f"math.sqrt({base})" if whole == 0 else f"{_integer_power(base, whole)} * math.sqrt({base})"
        else:
            return self._vector_form("power", [base, repr(float(exponent))])
        return text if exponent >= 0 else f"1.0 / ({text})"

    def _clip(self, x: str, low: str, high: str) -> str:
        # min(max(x, lo), hi): the upper bound wins where lo > hi.
        return _smaller(self.assign(_larger(x, low)), high)

    def _call(self, function: str, a: list[str]) -> str:
        # The selects are ordered so that a NaN in any argument is handed on, never replaced by a bound.
        match function:
            case "abs":
                return f"abs({a[0]})"
            case "sign":
                return f"1.0 if {a[0]} > 0.0 else (-1.0 if {a[0]} < 0.0 else {a[0]})"
            case "min":
                return _smaller(*a)
            case "max":
                return _larger(*a)
            case "clip":
                return self._clip(*a)
            case "deadzone":
                return f"{a[0]} - {self.assign(self._clip(a[0], self.assign(f'-{a[1]}'), a[1]))}"
            case "where":
                return f"{a[1]} if {a[0]} else {a[2]}"
            case "sqrt":
                return f"math.sqrt({a[0]})"  # an instruction of the processor, packed too
        return self._vector_form(function, a)

    def _vector_form(self, function: str, arguments: list[str]) -> str:
        name = f"v{function}"
        self.functions.add(name)
        return f"{name}({', '.join(arguments)})"


def _smaller(a: str, b: str) -> str:
    return f"{b} if ({b} < {a}) | ({b} != {b}) else {a}"


def _larger(a: str, b: str) -> str:
    return f"{b} if ({b} > {a}) | ({b} != {b}) else {a}"


def _integer_power(base: str, exponent: int) -> str:
    """Write base**exponent as products by repeated squaring; one expression, shared by the compiler."""
    if exponent == 0:
        return "1.0"
    if exponent == 1:
        return base
    half = _integer_power(base, exponent // 2)
    square = f"({half}) * ({half})" if exponent > 3 else f"{base} * {base}"
    return square if exponent % 2 == 0 else f"{square} * {base}"


def held_variables(loop: Loop) -> dict[Expression, str]:
    """Return the variables of the signals that are held: the i-th is ui."""
    held = loop.hold.signals if loop.hold else ()
    return {Name(name): f"u{i}" for i, name in enumerate(held)}


def right_hand_side(loop: Loop) -> tuple[StraightLine, list[str]]:
    """Return the code of f and the variables that hold the n derivatives; a held signal i is ui."""
    code = StraightLine(loop, held_variables(loop))
    return code, [code.variable(tree) for tree in loop.dynamics]


def commands(loop: Loop, code: StraightLine) -> tuple[StraightLine, list[str]]:
    """Return the code of the held signals at a sample and their variables; constants are added to those of `code`."""
    own = StraightLine(loop)
    own.share_with(code)
    return own, [own.variable(Name(name)) for name in (loop.hold.signals if loop.hold else ())]
