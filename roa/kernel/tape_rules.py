"""What each operation of a tape does to its operands: value, first and second derivative, as intervals.

At a kink (abs, min, max) the derivative is Clarke's: the hull of the slopes of both sides where the box may
hold the kink; the second derivative is unbounded there. Where a value may jump (sign, where, atan2 on its
cut) the first derivative is unbounded too. Mean-value and Taylor tests then fail by themselves, and none
needs to know about kinks.
"""

from __future__ import annotations

import math

from roa.kernel.interval_functions import (
    arc_cosine,
    arc_sine,
    arc_tangent,
    cosine,
    exponential,
    hyperbolic_cosine,
    hyperbolic_sine,
    hyperbolic_tangent,
    inverse_root_power,
    logarithm,
    one_minus_square,
    real_power,
    root,
    sign,
    sine,
    tangent,
)
from roa.kernel.intervals import Interval, absolute, add, multiply, power, reciprocal, square, subtract, undefined
from roa.kernel.machine_code import inner
from roa.kernel.tape import Op

SixFloats = tuple[float, float, float, float, float, float]
FiveIntervals = tuple[Interval, Interval, Interval, Interval, Interval]

POWER, REAL_POWER, RECIPROCAL, SQUARE = int(Op.POWER), int(Op.REAL_POWER), int(Op.RECIPROCAL), int(Op.SQUARE)
SIN, COS, TAN = int(Op.SIN), int(Op.COS), int(Op.TAN)
ASIN, ACOS, ATAN = int(Op.ASIN), int(Op.ACOS), int(Op.ATAN)
SINH, COSH, TANH = int(Op.SINH), int(Op.COSH), int(Op.TANH)
EXP, LOG, SQRT, ABS, SIGN = int(Op.EXP), int(Op.LOG), int(Op.SQRT), int(Op.ABS), int(Op.SIGN)


@inner
def one_operand(op: int, a: float, b: float, k: int, p: float, q: float) -> SixFloats:
    """Value, first and second derivative of a function of u in [a, b]: (v, v', v'') as six floats.

    k is the exponent of POWER, [p, q] that of REAL_POWER; other operations ignore them.
    """
    if op == RECIPROCAL:
        v = reciprocal(a, b)
        s = square(v[0], v[1])
        d, e = (-s[1], -s[0]), multiply(*multiply(*v, *s), 2.0, 2.0)
    elif op == SQUARE:
        v, d, e = square(a, b), (2.0 * a, 2.0 * b), (2.0, 2.0)
    elif op == POWER:
        v, d, e = _integer_power(a, b, k)
    elif op == REAL_POWER:
        v, d, e = _real_power(a, b, p, q)
    elif op == SIN:
        v, d = sine(a, b), cosine(a, b)
        e = (-v[1], -v[0])
    elif op == COS:
        v, s = cosine(a, b), sine(a, b)
        d, e = (-s[1], -s[0]), (-v[1], -v[0])
    elif op == TAN:
        v = tangent(a, b)
        d = add(1.0, 1.0, *square(*v))
        e = multiply(2.0, 2.0, *multiply(*v, *d))
    elif op in (ASIN, ACOS):
        w = one_minus_square(a, b)
        v, d, e = arc_sine(a, b), inverse_root_power(*w, 1), multiply(a, b, *inverse_root_power(*w, 3))
        if op == ACOS:
            v, d, e = arc_cosine(a, b), (-d[1], -d[0]), (-e[1], -e[0])
    elif op == ATAN:
        v, d = arc_tangent(a, b), reciprocal(*add(1.0, 1.0, *square(a, b)))
        e = multiply(-2.0, -2.0, *multiply(a, b, *square(*d)))
    elif op == SINH:
        v, d = hyperbolic_sine(a, b), hyperbolic_cosine(a, b)
        e = v
    elif op == COSH:
        v, d = hyperbolic_cosine(a, b), hyperbolic_sine(a, b)
        e = v
    elif op == TANH:
        v = hyperbolic_tangent(a, b)
        d = one_minus_square(*v)
        e = multiply(-2.0, -2.0, *multiply(*v, *d))
    elif op == EXP:
        v = exponential(a, b)
        d = e = v
    elif op == LOG:
        v, d = logarithm(a, b), reciprocal(a, b)
        s = square(*d)
        e = (-s[1], -s[0])
    elif op == SQRT:
        v, d = root(a, b), multiply(0.5, 0.5, *inverse_root_power(a, b, 1))
        e = multiply(-0.25, -0.25, *inverse_root_power(a, b, 3))
    else:
        v, d, e = _kinked(op, a, b)
    if undefined(*v):
        return math.nan, math.nan, math.nan, math.nan, math.nan, math.nan
    return v[0], v[1], d[0], d[1], e[0], e[1]


@inner
def _kinked(op: int, a: float, b: float) -> tuple[Interval, Interval, Interval]:
    """Rules of abs and sign."""
    slope = sign(a, b)
    unbounded = (-math.inf, math.inf)
    smooth = a > 0.0 or b < 0.0
    if op == ABS:
        slope = slope if smooth else (-1.0, 1.0)
        return absolute(a, b), slope, ((0.0, 0.0) if smooth else unbounded)
    if op == SIGN and smooth:
        return slope, (0.0, 0.0), (0.0, 0.0)
    return slope, unbounded, unbounded


@inner
def _integer_power(a: float, b: float, k: int) -> tuple[Interval, Interval, Interval]:
    v = power(a, b, k)
    d = multiply(float(k), float(k), *power(a, b, k - 1))
    e = multiply(float(k * (k - 1)), float(k * (k - 1)), *power(a, b, k - 2))
    return v, d, e


@inner
def _real_power(a: float, b: float, p: float, q: float) -> tuple[Interval, Interval, Interval]:
    v = real_power(a, b, p, q)
    if a <= 0.0 and not p > 0.0:
        v = (math.nan, math.nan)  # a negative power of zero
    once = subtract(p, q, 1.0, 1.0)
    twice = subtract(p, q, 2.0, 2.0)
    d = multiply(p, q, *real_power(a, b, *once))
    e = multiply(*multiply(p, q, *once), *real_power(a, b, *twice))
    return v, d, e


@inner
def two_arguments_of_angle(a: float, b: float, c: float, d: float) -> FiveIntervals:
    """Derivatives of atan2(y, x) for y in [a, b], x in [c, d] off its cut: (v_y, v_x, v_yy, v_yx, v_xx)."""
    inverse = reciprocal(*add(*square(a, b), *square(c, d)))
    fourth = square(*inverse)
    by_y = multiply(c, d, *inverse)
    by_x = multiply(-b, -a, *inverse)
    mixed = multiply(*subtract(*square(a, b), *square(c, d)), *fourth)
    twice = multiply(*multiply(2.0 * a, 2.0 * b, c, d), *fourth)
    return by_y, by_x, (-twice[1], -twice[0]), mixed, twice
