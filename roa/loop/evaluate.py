"""Values of formulas at many points at once, by numpy; nothing here is executed as text."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.loop.expression import Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power

Array = NDArray[np.float64]


def _clip(x: Any, low: Any, high: Any) -> Any:
    # np.clip is not used: it leaves the result undefined where low > high, the formula language does not.
    return np.minimum(np.maximum(x, low), high)


_FUNCTIONS: dict[str, Callable[..., Any]] = {
    "sin": np.sin, "cos": np.cos, "tan": np.tan,
    "asin": np.arcsin, "acos": np.arccos, "atan": np.arctan, "atan2": np.arctan2,
    "sinh": np.sinh, "cosh": np.cosh, "tanh": np.tanh,
    "exp": np.exp, "log": np.log, "sqrt": np.sqrt, "abs": np.abs, "sign": np.sign,
    "min": np.minimum, "max": np.maximum, "clip": _clip,
    "deadzone": lambda x, width: x - _clip(x, -width, width),
    "where": np.where,
}  # fmt: skip
_OPERATORS: dict[str, Callable[..., Any]] = {"+": np.add, "-": np.subtract, "*": np.multiply, "/": np.divide}
_COMPARISONS: dict[str, Callable[..., Any]] = {
    "<": np.less, "<=": np.less_equal, ">": np.greater, ">=": np.greater_equal,
}  # fmt: skip


def evaluate(tree: Expression, values: Mapping[str, Array]) -> Array:
    """Evaluate a tree at the points given by the values of its names.

    Poles, overflow and roots of negative numbers give inf or NaN, silently: what they mean is decided
    where the value is used.

    Parameters
    ----------
    tree : Expression
    values : mapping from name to float64 (...); all shapes broadcast

    Returns
    -------
    float64 (...), zero-dimensional where the tree uses no array
    """
    with np.errstate(all="ignore"):
        return np.asarray(_value(tree, values))


def _value(node: Expression, values: Mapping[str, Array]) -> Any:
    match node:
        case Number(value):
            return np.float64(float(value))
        case Name(name):
            return values[name]
        case Negate(operand):
            return np.negative(_value(operand, values))
        case Binary(op, left, right):
            return _OPERATORS[op](_value(left, values), _value(right, values))
        case Power(base, exponent):
            return np.power(_value(base, values), float(exponent))
        case Compare(op, left, right):
            return _COMPARISONS[op](_value(left, values), _value(right, values))
        case Lookup(table, argument, slope):
            return (table.slope if slope else table.value)(_value(argument, values))
        case Call(function, arguments):
            return _FUNCTIONS[function](*(_value(argument, values) for argument in arguments))
