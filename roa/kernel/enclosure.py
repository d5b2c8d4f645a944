"""Enclosures of formulas over many boxes: value, gradient and Hessian, with every rounding outward.

One interpreter is compiled once and serves all loops; it ran as fast as code generated for each loop,
which costs 8 to 40 s of compiling apiece.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.kernel import interval_functions, intervals, table_rules, tape, tape_rules
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.interval_functions import arc_tangent_jumps, arc_tangent_of_two
from roa.kernel.intervals import Interval, add, hull, maximum, minimum, multiply, undefined
from roa.kernel.machine_code import compiled, inner
from roa.kernel.table_rules import piecewise
from roa.kernel.tape import Op, Program
from roa.kernel.tape_rules import one_operand, two_arguments_of_angle

Array = NDArray[np.float64]
Integers = NDArray[np.int64]
Flags = NDArray[np.bool_]

VARIABLE, CONSTANT = int(Op.VARIABLE), int(Op.CONSTANT)
ADD, SUBTRACT, NEGATE, MULTIPLY = int(Op.ADD), int(Op.SUBTRACT), int(Op.NEGATE), int(Op.MULTIPLY)
ATAN2, MIN, MAX, ABS = int(Op.ATAN2), int(Op.MIN), int(Op.MAX), int(Op.ABS)
WHERE_NEGATIVE, WHERE_NOT_POSITIVE = int(Op.WHERE_NEGATIVE), int(Op.WHERE_NOT_POSITIVE)
LOOKUP = int(Op.LOOKUP)


@dataclass(frozen=True)
class Enclosed:
    """Enclosures of k outputs over m boxes in n variables; NaN where an output is undefined somewhere.

    Attributes
    ----------
    value : IntervalArray (m, k)
    gradient : IntervalArray (m, k, n); zeros where not asked for
    hessian : IntervalArray (m, k, n, n), symmetric; zeros where not asked for
    """

    value: IntervalArray
    gradient: IntervalArray
    hessian: IntervalArray


def enclose(program: Program, low: Array, high: Array, order: int) -> Enclosed:
    """Enclose the outputs of a program, and their derivatives up to `order`, over the boxes [low, high].

    Parameters
    ----------
    program : Program
    low, high : float64 (m, n)
    order : 0, 1 or 2
    """
    low, high = np.ascontiguousarray(low, dtype=np.float64), np.ascontiguousarray(high, dtype=np.float64)
    m, k, n = len(low), len(program.outputs), program.support.shape[1]
    row, column = np.tril_indices(n)
    jets = np.zeros((m, k, (1, 1 + n, 1 + n + len(row))[order], 2))
    p = program
    _interpret(p.ops, p.constants, p.support, p.slots, p.counts, p.outputs, low, high, order, jets)
    gradient, hessian = np.zeros((m, k, n, 2)), np.zeros((m, k, n, n, 2) if order == 2 else (m, k, 0, 0, 2))
    if order >= 1:
        gradient = jets[:, :, 1 : 1 + n]
    if order == 2:
        hessian[:, :, row, column] = hessian[:, :, column, row] = jets[:, :, 1 + n :]
    value = jets[:, :, 0]
    return Enclosed(*(IntervalArray(part[..., 0], part[..., 1]) for part in (value, gradient, hessian)))


def _interpret_boxes(
    ops: Integers,
    constants: Array,
    support: Flags,
    slots: Integers,
    counts: Integers,
    outputs: Integers,
    low: Array,
    high: Array,
    order: int,
    jets: Array,
) -> None:
    """Run the tape once for each box; what is outside `slots` stays exactly zero."""
    d = np.zeros((ops.shape[0], jets.shape[2], 2))
    sides = np.zeros(ops.shape[0], dtype=np.int64)
    for box in range(low.shape[0]):
        interpret(ops, constants, support, slots, counts, sides, low[box], high[box], order, d)
        for j in range(outputs.shape[0]):
            jets[box, j] = d[outputs[j]]


@inner
def interpret(
    ops: Integers,
    constants: Array,
    support: Flags,
    slots: Integers,
    counts: Integers,
    sides: Integers,
    low: Array,
    high: Array,
    order: int,
    d: Array,
) -> None:
    """Run the tape over the box [low, high] (n,) and leave the jet of every row, up to `order`, in d.

    Of d (rows, slots of a jet, 2) only what is in `slots` is written; the rest has to be zero from the start.
    `sides` (rows,) picks the first (1) or second (2) of the two smooth functions that a minimum, a maximum or an
    absolute value switches between, all over the box; 0 leaves the switching in.
    """
    for t in range(ops.shape[0]):
        if ops[t, 0] == VARIABLE:
            i = ops[t, 1]
            d[t, 0, 0], d[t, 0, 1] = low[i], high[i]
            if order >= 1:
                d[t, 1 + i, 0] = d[t, 1 + i, 1] = 1.0
        elif ops[t, 0] == CONSTANT:
            d[t, 0, 0], d[t, 0, 1] = constants[t, 0], constants[t, 1]
        else:
            used = slots[t, : counts[t, order]]
            if sides[t] != 0:
                _one_side(d, t, ops[t], sides[t], used)
            elif ops[t, 0] == LOOKUP:
                _table(d, t, ops[t], constants, support[t], order)
            elif not _alike(d, t, ops[t], support.shape[1], used):
                _smooth(d, t, ops[t], constants[t], support[t], order)
            if undefined(d[t, 0, 0], d[t, 0, 1]):
                for s in used:
                    d[t, s, 0] = d[t, s, 1] = math.nan


@inner
def _alike(d: Array, t: int, operation: Integers, n: int, used: Integers) -> bool:
    """Carry out an operation that treats the numbers of a jet alike; return False for any other."""
    op, a, b, c = operation[0], operation[1], operation[2], operation[3]
    first, second = (a, b) if op != MAX else (b, a)
    if op == ADD:
        for s in used:
            d[t, s, 0], d[t, s, 1] = add(d[a, s, 0], d[a, s, 1], d[b, s, 0], d[b, s, 1])
    elif op == SUBTRACT:
        for s in used:
            d[t, s, 0], d[t, s, 1] = add(d[a, s, 0], d[a, s, 1], -d[b, s, 1], -d[b, s, 0])
    elif op == NEGATE:
        for s in used:
            d[t, s, 0], d[t, s, 1] = -d[a, s, 1], -d[a, s, 0]
    elif op in (MIN, MAX):
        below, above = d[first, 0, 1] <= d[second, 0, 0], d[second, 0, 1] <= d[first, 0, 0]
        # Both at a point where two functions may only touch: whose slope is the minimum's does not show there.
        if below and not above:
            _copy(d, t, a, used)
        elif above and not below:
            _copy(d, t, b, used)
        else:
            _kink(d, t, a, b, op == MIN, n, used)
    elif op in (WHERE_NEGATIVE, WHERE_NOT_POSITIVE):
        low, high = d[a, 0, 0], d[a, 0, 1]
        if high < 0.0 or (high == 0.0 and op == WHERE_NOT_POSITIVE):
            _copy(d, t, b, used)
        elif low > 0.0 or (low == 0.0 and op == WHERE_NEGATIVE):
            _copy(d, t, c, used)
        else:
            _jump(d, t, *hull(d[b, 0, 0], d[b, 0, 1], d[c, 0, 0], d[c, 0, 1]), used)
            if undefined(low, high):
                d[t, 0, 0] = math.nan
    elif op == ATAN2 and arc_tangent_jumps(d[a, 0, 0], d[a, 0, 1], d[b, 0, 0], d[b, 0, 1]):
        _jump(d, t, *arc_tangent_of_two(d[a, 0, 0], d[a, 0, 1], d[b, 0, 0], d[b, 0, 1]), used)
    else:
        return False
    return True


@inner
def switches(d: Array, t: int, operation: Integers) -> bool:
    """Say whether a row is a minimum, maximum or absolute value whose kink may lie in the box that d was run over."""
    op, a, b = operation[0], operation[1], operation[2]
    if op in (MIN, MAX):
        return not (d[a, 0, 1] <= d[b, 0, 0] or d[b, 0, 1] <= d[a, 0, 0])
    return op == ABS and not (d[a, 0, 0] > 0.0 or d[a, 0, 1] < 0.0)


@inner
def _one_side(d: Array, t: int, operation: Integers, side: int, used: Integers) -> None:
    _copy(d, t, operation[2] if side == 2 and operation[0] != ABS else operation[1], used)
    for s in used[: len(used) if side == 2 and operation[0] == ABS else 0]:
        d[t, s, 0], d[t, s, 1] = -d[t, s, 1], -d[t, s, 0]


@inner
def _copy(d: Array, t: int, a: int, used: Integers) -> None:
    for s in used:
        d[t, s, 0], d[t, s, 1] = d[a, s, 0], d[a, s, 1]


@inner
def _jump(d: Array, t: int, low: float, high: float, used: Integers) -> None:
    """A value that may jump within the box: no derivative is bounded."""
    for s in used:
        d[t, s, 0], d[t, s, 1] = -math.inf, math.inf
    d[t, 0, 0], d[t, 0, 1] = low, high


@inner
def _kink(d: Array, t: int, a: int, b: int, smaller: bool, n: int, used: Integers) -> None:
    """A minimum or maximum that may switch within the box: slopes are the hull of both, no second is bounded."""
    for s in used:
        if s <= n:
            d[t, s, 0], d[t, s, 1] = hull(d[a, s, 0], d[a, s, 1], d[b, s, 0], d[b, s, 1])
        else:
            d[t, s, 0], d[t, s, 1] = -math.inf, math.inf
    if smaller:
        d[t, 0, 0], d[t, 0, 1] = minimum(d[a, 0, 0], d[a, 0, 1], d[b, 0, 0], d[b, 0, 1])
    else:
        d[t, 0, 0], d[t, 0, 1] = maximum(d[a, 0, 0], d[a, 0, 1], d[b, 0, 0], d[b, 0, 1])


@inner
def _smooth(d: Array, t: int, operation: Integers, constant: Array, support: Flags, order: int) -> None:
    """Carry out a smooth operation by the chain rule of second order."""
    op, a, b = operation[0], operation[1], operation[2]
    zero, one = (0.0, 0.0), (1.0, 1.0)
    u, w = (d[a, 0, 0], d[a, 0, 1]), (d[b, 0, 0], d[b, 0, 1])
    if op == MULTIPLY:
        d[t, 0, 0], d[t, 0, 1] = multiply(u[0], u[1], w[0], w[1])
        _chain_two(d, t, a, b, w, u, zero, one, zero, support, order)
    elif op == ATAN2:
        d[t, 0, 0], d[t, 0, 1] = arc_tangent_of_two(u[0], u[1], w[0], w[1])
        by_y, by_x, yy, yx, xx = two_arguments_of_angle(u[0], u[1], w[0], w[1])
        _chain_two(d, t, a, b, by_y, by_x, yy, yx, xx, support, order)
    else:
        f = one_operand(op, u[0], u[1], b, constant[0], constant[1])
        d[t, 0, 0], d[t, 0, 1] = f[0], f[1]
        _chain_one(d, t, a, (f[2], f[3]), (f[4], f[5]), support, order)


@inner
def _table(d: Array, t: int, operation: Integers, constants: Array, support: Flags, order: int) -> None:
    """Look a row up in a table."""
    a, first, pieces = operation[1], operation[2], operation[3]
    f = piecewise(d[a, 0, 0], d[a, 0, 1], constants, first, pieces, constants[t, 0] == 1.0)
    d[t, 0, 0], d[t, 0, 1] = f[0], f[1]
    _chain_one(d, t, a, (f[2], f[3]), (f[4], f[5]), support, order)


@inner
def _chain_one(d: Array, t: int, a: int, first: Interval, second: Interval, support: Flags, order: int) -> None:
    """Derivatives of row t = f(row a) from f' and f''."""
    n = support.shape[0]
    for i in range(1, 1 + n if order >= 1 else 1):
        if support[i - 1]:
            d[t, i, 0], d[t, i, 1] = multiply(first[0], first[1], d[a, i, 0], d[a, i, 1])
    s = n
    for i in range(1, 1 + n if order >= 2 else 1):
        for j in range(1, i + 1):
            s += 1
            if support[i - 1] and support[j - 1]:
                low, high = multiply(first[0], first[1], d[a, s, 0], d[a, s, 1])
                d[t, s, 0], d[t, s, 1] = _curved(low, high, second, d, a, i, a, j)


@inner
def _chain_two(
    d: Array,
    t: int,
    a: int,
    b: int,
    by_a: Interval,
    by_b: Interval,
    aa: Interval,
    ab: Interval,
    bb: Interval,
    support: Flags,
    order: int,
) -> None:
    """Derivatives of row t = f(row a, row b) from the first and second partial derivatives of f."""
    n = support.shape[0]
    for i in range(1, 1 + n if order >= 1 else 1):
        if support[i - 1]:
            d[t, i, 0], d[t, i, 1] = _slope(d, a, b, i, by_a, by_b)
    s = n
    for i in range(1, 1 + n if order >= 2 else 1):
        for j in range(1, i + 1):
            s += 1
            if support[i - 1] and support[j - 1]:
                low, high = _slope(d, a, b, s, by_a, by_b)
                low, high = _curved(low, high, aa, d, a, i, a, j)
                low, high = _curved(low, high, ab, d, a, i, b, j)
                low, high = _curved(low, high, ab, d, b, i, a, j)
                d[t, s, 0], d[t, s, 1] = _curved(low, high, bb, d, b, i, b, j)


@inner
def _slope(d: Array, a: int, b: int, s: int, by_a: Interval, by_b: Interval) -> Interval:
    """by_a a[s] + by_b b[s]."""
    p = multiply(by_a[0], by_a[1], d[a, s, 0], d[a, s, 1])
    q = multiply(by_b[0], by_b[1], d[b, s, 0], d[b, s, 1])
    return add(p[0], p[1], q[0], q[1])


@inner
def _curved(low: float, high: float, second: Interval, d: Array, a: int, i: int, b: int, j: int) -> Interval:
    """[low, high] + second a[i] b[j], a curvature times two slopes."""
    if second[0] == 0.0 and second[1] == 0.0:
        return low, high
    product = multiply(d[a, i, 0], d[a, i, 1], d[b, j, 0], d[b, j, 1])
    term = multiply(second[0], second[1], product[0], product[1])
    return add(low, high, term[0], term[1])


_interpret = compiled(_interpret_boxes, uses=(intervals, interval_functions, table_rules, tape, tape_rules))
