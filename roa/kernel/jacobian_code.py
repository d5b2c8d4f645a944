"""The Jacobian of f as straight-line code: every slope by the chain rule, exact, from the trees of the loop.

At a kink the slope is that of the side which the code of f takes there, as in `roa.loop.symbolic`.
"""

from __future__ import annotations

from decimal import Decimal

from roa.kernel.straight_line import StraightLine, held_variables
from roa.loop.derivative import slope_of
from roa.loop.expression import Binary, Call, Expression, Lookup, Name, Negate, Number, Power
from roa.loop.model import Loop


class JacobianCode:
    """Assignments that evaluate the slopes of the dynamics with respect to the states.

    Attributes
    ----------
    code : StraightLine
    entries : n rows of n variables; None where a slope is zero everywhere
    """

    def __init__(self, loop: Loop, shared: StraightLine) -> None:
        self.code = StraightLine(loop, held_variables(loop))
        self.code.share_with(shared)
        self._loop = loop
        self._states = {Name(name): i for i, name in enumerate(loop.states)}
        self._held = held_variables(loop)
        self._known: dict[tuple[Expression, int], str | None] = {}
        self.entries = [[self._slope(tree, j) for j in range(loop.n)] for tree in loop.dynamics]

    def _slope(self, tree: Expression, j: int) -> str | None:
        """Variable that holds the tree's slope along state j, or None for zero."""
        if (tree, j) not in self._known:
            self._known[tree, j] = self._new_slope(tree, j)
        return self._known[tree, j]

    def _new_slope(self, tree: Expression, j: int) -> str | None:
        match tree:
            case Number():
                return None
            case Name(name):
                if tree in self._states:
                    return "1.0" if self._states[tree] == j else None
                signal = None if tree in self._held else self._loop.signals.get(name)
                return None if signal is None else self._slope(signal, j)
            case Negate(operand):
                slope = self._slope(operand, j)
                return None if slope is None else self.code.assign(f"-{slope}")
            case Binary(op, left, right):
                return self._of_two(op, left, right, self._slope(left, j), self._slope(right, j))
            case Power(base, exponent):
                outer = Binary("*", Number(exponent), Power(base, exponent - 1))
                return self._times(outer, self._slope(base, j))
            case Lookup(table, argument):
                return self._times(Lookup(table, argument, slope=True), self._slope(argument, j))
            case Call(function, arguments):
                return self._of_call(function, arguments, j)
        raise AssertionError(tree)

    def _times(self, outer: Expression, slope: str | None) -> str | None:
        return None if slope is None else self.code.assign(f"{self.code.variable(outer)} * {slope}")

    def _of_two(self, op: str, a: Expression, b: Expression, da: str | None, db: str | None) -> str | None:
        if da is None and db is None:
            return None
        if op in "+-":
            if db is None or da is None:
                return da or (db if op == "+" else self.code.assign(f"-{db}"))
            return self.code.assign(f"{da} {op} {db}")
        if op == "*":
            left, right = self._times(b, da), self._times(a, db)
            return self.code.assign(f"{left} + {right}") if left and right else left or right
        inverse = Binary("/", Number(Decimal(1)), b)
        if db is None:
            return self._times(inverse, da)
        fall = self.code.assign(f"{self.code.variable(Binary('/', a, b))} * {db}")
        return self.code.assign(f"({da or '0.0'} - {fall}) * {self.code.variable(inverse)}")

    def _of_call(self, function: str, a: tuple[Expression, ...], j: int) -> str | None:
        match function:
            case "sign":
                return None
            case "abs":
                return self._slope(Call("max", (a[0], Negate(a[0]))), j)
            case "clip":
                return self._slope(Call("min", (Call("max", a[:2]), a[2])), j)
            case "deadzone":
                return self._slope(Binary("-", a[0], Call("clip", (a[0], Negate(a[1]), a[1]))), j)
            case "min" | "max":
                order = "<=" if function == "min" else ">="
                condition = f"{self.code.variable(a[0])} {order} {self.code.variable(a[1])}"
                return self._selected(condition, self._slope(a[0], j), self._slope(a[1], j))
            case "where":
                return self._selected(self.code.variable(a[0]), self._slope(a[1], j), self._slope(a[2], j))
            case "atan2":
                return self._of_angle(a[0], a[1], self._slope(a[0], j), self._slope(a[1], j))
        slope = self._slope(a[0], j)
        outer = slope_of(function, a[0])
        assert outer is not None, function
        return self._times(outer, slope)

    def _selected(self, condition: str, first: str | None, second: str | None) -> str | None:
        if first is None and second is None:
            return None
        return self.code.assign(f"{first or '0.0'} if {condition} else {second or '0.0'}")

    def _of_angle(self, y: Expression, x: Expression, dy: str | None, dx: str | None) -> str | None:
        if dx is None and dy is None:
            return None
        square = Binary("+", Power(x, Decimal(2)), Power(y, Decimal(2)))
        turned = " - ".join([f"{self.code.variable(x)} * {dy or '0.0'}", f"{self.code.variable(y)} * {dx or '0.0'}"])
        return self.code.assign(f"({turned}) / {self.code.variable(square)}")
