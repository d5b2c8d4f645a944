"""Exact partial derivatives of formulas with respect to the states.

Each formula is cut into steps: a function or a power of named values, or a rational combination of
them. sympy differentiates each step alone and the chain rule joins the steps as numbers, so that
formulas nested in signals do not multiply out, and no simplification ever reaches across a function
(sympy would turn sqrt(-u**2) of a real u into an imaginary number, and spend hours on nested powers).
At a kink the slope is that of the side which `evaluate` takes: the inner one at the edges of a clip.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.loop.evaluate import evaluate
from roa.loop.expression import Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power, names_in

Array = NDArray[np.float64]
Slopes = dict[int, Any]  # index of a state -> derivative with respect to it, where it is not zero throughout

_SELECTING = ("min", "max", "where", "sign")  # the slope is that of one argument, or of none
_OPERATORS: dict[str, Callable[[Any, Any], Any]] = {
    "+": operator.add, "-": operator.sub, "*": operator.mul, "/": operator.truediv,
}  # fmt: skip


@dataclass(frozen=True)
class _Step:
    """A named value and how its slopes follow from those of the names in its tree.

    `partials` is absent for the functions that select one of their arguments.
    """

    name: str
    tree: Expression
    parents: tuple[str, ...]
    partials: Callable[[Mapping[str, Array]], list[Any]] | None


class Partials:
    """Derivatives of trees with respect to the states, through the signals.

    Parameters
    ----------
    states : names, length n
    parameters : names of constants
    signals : mapping from name to tree, in an order in which each uses those before it
    dynamics : m trees; a single one where the gradient of a scalar is wanted
    """

    def __init__(
        self,
        states: tuple[str, ...],
        parameters: tuple[str, ...],
        signals: Mapping[str, Expression],
        dynamics: tuple[Expression, ...],
    ) -> None:
        self._states = states
        self._constants = frozenset(parameters)
        self._steps: list[_Step] = []
        self._names: dict[Expression, str] = {}  # of the steps that the configuration did not name
        for name, tree in signals.items():
            self._append(name, self._flatten(tree))
        self._outputs = [self._named(tree) for tree in dynamics]

    def jacobian(self, values: Mapping[str, Array], shape: tuple[int, ...]) -> Array:
        """Evaluate the derivatives at the points given by `values`.

        Parameters
        ----------
        values : mapping from each state, parameter and signal to float64, broadcastable to `shape`
        shape : shape of the set of points

        Returns
        -------
        float64 (*shape, m, n)
        """
        known = dict(values)
        slopes: dict[str, Slopes] = {name: {i: 1.0} for i, name in enumerate(self._states)}
        with np.errstate(all="ignore"):
            for step in self._steps:
                if step.name not in known:
                    known[step.name] = evaluate(step.tree, known)
                slopes[step.name] = _slopes(step, known, slopes)
        result = np.zeros((*shape, len(self._outputs), len(self._states)))
        for row, name in enumerate(self._outputs):
            for column, slope in slopes.get(name, {}).items():
                result[..., row, column] = slope
        return result

    def gradient(self, values: Mapping[str, Array], shape: tuple[int, ...]) -> Array:
        """Evaluate the derivatives of the first tree alone, float64 (*shape, n)."""
        row: Array = self.jacobian(values, shape)[..., 0, :]
        return row

    def _append(self, name: str, tree: Expression) -> None:
        parents = tuple(sorted(names_in(tree) - self._constants))
        partials = None if isinstance(tree, Call) and tree.function in _SELECTING else _differentiate(tree, parents)
        self._steps.append(_Step(name, tree, parents, partials))

    def _named(self, tree: Expression) -> str:
        """Return the name of the tree's value, as a new step unless it is a name already."""
        flat = self._flatten(tree)
        if isinstance(flat, Name):
            return flat.name
        if flat not in self._names:
            name = f"#{len(self._steps)}"  # no identifier, so it cannot meet a name of the configuration
            self._names[flat] = name
            self._append(name, flat)
        return self._names[flat]

    def _flatten(self, node: Expression) -> Expression:
        """Turn every function and power inside the node into a step; what is left is one step."""
        match node:
            case Number() | Name():
                return node
            case Negate(operand):
                return Negate(self._inner(operand))
            case Binary(op, left, right):
                return Binary(op, self._inner(left), self._inner(right))
            case Power(base, exponent):
                return Power(Name(self._named(base)), exponent)
            case Compare(op, left, right):
                return Compare(op, Name(self._named(left)), Name(self._named(right)))
            case Call("clip", (x, low, high)):
                return self._flatten(Call("min", (Call("max", (x, low)), high)))
            case Call("abs", (x,)):
                return self._flatten(Call("max", (x, Negate(x))))
            case Call("deadzone", (x, width)):
                return self._flatten(Binary("-", x, Call("clip", (x, Negate(width), width))))
            case Call("where", (condition, first, second)):
                return Call("where", (self._flatten(condition), Name(self._named(first)), Name(self._named(second))))
            case Call(function, arguments):
                return Call(function, tuple(Name(self._named(argument)) for argument in arguments))
            case Lookup(table, argument):
                return Lookup(table, Name(self._named(argument)))

    def _inner(self, node: Expression) -> Expression:
        """Keep sums, products and quotients in place; name what is a step of its own."""
        return Name(self._named(node)) if isinstance(node, Power | Call | Lookup) else self._flatten(node)


def _slopes(step: _Step, known: Mapping[str, Array], slopes: Mapping[str, Slopes]) -> Slopes:
    if step.partials is None:
        return _selected(step.tree, known, slopes)
    total: Slopes = {}
    for parent, partial in zip(step.parents, step.partials(known), strict=True):
        for i, slope in slopes.get(parent, {}).items():
            total[i] = total.get(i, 0.0) + partial * slope
    return total


def _selected(tree: Expression, known: Mapping[str, Array], slopes: Mapping[str, Slopes]) -> Slopes:
    """Slopes of min, max and where: selected, not weighted, since 0 times a NaN of the other side is NaN."""
    match tree:
        case Call("sign"):
            return {}
        case Call("where", (condition, Name(first), Name(second))):
            takes_first: Any = evaluate(condition, known)
        case Call(function, (Name(first), Name(second))):
            takes_first = known[first] <= known[second] if function == "min" else known[first] >= known[second]
        case _:
            raise AssertionError(tree)
    left, right = slopes.get(first, {}), slopes.get(second, {})
    return {i: np.where(takes_first, left.get(i, 0.0), right.get(i, 0.0)) for i in sorted(left.keys() | right.keys())}


def _differentiate(tree: Expression, parents: tuple[str, ...]) -> Callable[[Mapping[str, Array]], list[Any]]:
    """Return the partial derivatives of one step with respect to its parents, as a function of the known values."""
    if isinstance(tree, Lookup):
        of_table = Lookup(tree.table, tree.argument, slope=True)
        return lambda known: [evaluate(of_table, known) for _ in parents]
    import sympy  # 0.3 s, and needed only where derivatives are

    names = sorted(names_in(tree))
    symbols = dict(zip(names, sympy.symbols(f"u:{len(names)}"), strict=True))
    formula = _to_sympy(tree, symbols)
    derivatives = [sympy.diff(formula, symbols[parent]) for parent in parents]
    compiled = sympy.lambdify(list(symbols.values()), derivatives, "numpy", printer=_printer(), cse=True)
    return lambda known: list(compiled(*(known[name] for name in names)))


def _to_sympy(node: Expression, symbols: Mapping[str, Any]) -> Any:
    import sympy

    match node:
        case Number(value):
            return _rational(value)
        case Name(name):
            return symbols[name]
        case Negate(operand):
            return -_to_sympy(operand, symbols)
        case Binary(op, left, right):
            return _OPERATORS[op](_to_sympy(left, symbols), _to_sympy(right, symbols))
        case Power(base, exponent):
            return _to_sympy(base, symbols) ** _rational(exponent)
        case Call(function, arguments):
            return getattr(sympy, function)(*(_to_sympy(argument, symbols) for argument in arguments))
        case Compare() | Lookup():
            raise AssertionError("a step of its own, which sympy does not see")


def _rational(value: Decimal) -> Any:
    import sympy

    return sympy.Rational(*value.as_integer_ratio())


@cache
def _printer() -> Any:
    """Printer that writes exact coefficients as the nearest float: long integers overflow in numpy."""
    from sympy.printing.numpy import NumPyPrinter

    class FloatPrinter(NumPyPrinter):  # type: ignore[misc]
        def _print_Rational(self, number: Any) -> str:
            return repr(float(number))

        _print_Integer = _print_Rational

        def _print_NaN(self, _: Any) -> str:
            return "nan"

        _print_ComplexInfinity = _print_NaN  # a pole that holds everywhere, such as x/(k - k)

    return FloatPrinter({"fully_qualified_modules": False, "inline": True, "allow_unknown_functions": True})
