"""Interval arithmetic with outward rounding: the four operations, powers and order, one pair of floats each.

An interval is a pair (low, high) of floats that holds every value that a quantity can take; an infinite
end means unbounded, never attained. (NaN, NaN) means that the quantity is undefined somewhere, such as
the logarithm of an interval that holds zero: it passes through every function below, also through those
that would hide it (a clip, an arc tangent), and since every comparison with NaN is false it proves nothing.

Rounding: for the result r of one float operation, r -/+ (|r| 2.3e-16 + 1e-300) lies beyond the exact
value, since the operation errs by at most |r| 2^-53 and so does the widening itself. This is slower to
converge than switching the processor's rounding mode, but needs no mode, and the compiler may reorder it.
"""

from __future__ import annotations

import math

from roa.kernel.machine_code import inner

Interval = tuple[float, float]

RELATIVE = 2.3e-16  # a little more than 2^-52
ABSOLUTE = 1e-300  # covers underflow
LARGEST = 1.7976931348623157e308


@inner
def down(r: float) -> float:
    """Return a float below every exact value that rounds to r."""
    if r == math.inf:
        return LARGEST
    if r == -math.inf:
        return r
    return r - (abs(r) * RELATIVE + ABSOLUTE)


@inner
def up(r: float) -> float:
    """Return a float above every exact value that rounds to r."""
    return -down(-r)


@inner
def undefined(low: float, high: float) -> bool:
    """Say whether the interval is undefined; with two arguments, either end will do."""
    return math.isnan(low) or math.isnan(high)


@inner
def add(a: float, b: float, c: float, d: float) -> Interval:
    """[a, b] + [c, d]; a sum that is exactly zero stays zero (it is never the result of underflow)."""
    low, high = a + c, b + d
    if undefined(low, high):
        return math.nan, math.nan
    if (c == 0.0 and d == 0.0) or (a == 0.0 and b == 0.0):
        return low, high
    if low != 0.0:
        low = max(down(low), 0.0) if a >= 0.0 and c >= 0.0 else down(low)
    if high != 0.0:
        high = min(up(high), 0.0) if b <= 0.0 and d <= 0.0 else up(high)
    return low, high


@inner
def subtract(a: float, b: float, c: float, d: float) -> Interval:
    """[a, b] - [c, d]."""
    return add(a, b, -d, -c)


@inner
def _product(x: float, y: float) -> float:
    """x y with 0 inf = 0: an infinite end stands for values that are finite."""
    return 0.0 if x == 0.0 or y == 0.0 else x * y


@inner
def multiply(a: float, b: float, c: float, d: float) -> Interval:
    """[a, b] [c, d]; zero times anything that is defined is exactly zero, and one times it is itself."""
    if undefined(a, b) or undefined(c, d):
        return math.nan, math.nan
    if (a == 0.0 and b == 0.0) or (c == 0.0 and d == 0.0):
        return 0.0, 0.0
    if a == 1.0 and b == 1.0:
        return c, d
    if c == 1.0 and d == 1.0:
        return a, b
    p, q, r, s = _product(a, c), _product(a, d), _product(b, c), _product(b, d)
    low, high = down(min(min(p, q), min(r, s))), up(max(max(p, q), max(r, s)))
    if (a >= 0.0 and c >= 0.0) or (b <= 0.0 and d <= 0.0):
        low = max(low, 0.0)
    elif (a >= 0.0 and d <= 0.0) or (b <= 0.0 and c >= 0.0):
        high = min(high, 0.0)
    return low, high


@inner
def reciprocal(a: float, b: float) -> Interval:
    """1 / [a, b], undefined where the interval holds zero."""
    if a > 0.0 or b < 0.0:
        low, high = down(1.0 / b), up(1.0 / a)
        return (max(low, 0.0), high) if a > 0.0 else (low, min(high, 0.0))
    return math.nan, math.nan


@inner
def square(a: float, b: float) -> Interval:
    """[a, b]^2, which is not [a, b][a, b]: both factors are the same number."""
    if undefined(a, b):
        return math.nan, math.nan
    near, far = (0.0 if a <= 0.0 <= b else min(abs(a), abs(b))), max(abs(a), abs(b))
    low, high = near * near, far * far
    return max(down(low), 0.0), (up(high) if far > 0.0 else 0.0)


@inner
def power(a: float, b: float, k: int) -> Interval:
    """[a, b]^k for an integer k; 1 for k = 0, undefined where k < 0 and the interval holds zero."""
    if undefined(a, b):
        return math.nan, math.nan
    least, most = a, b
    if k % 2 == 0:
        least, most = (0.0 if a <= 0.0 <= b else min(abs(a), abs(b))), max(abs(a), abs(b))
    low, high = _raised(least, abs(k))[0], _raised(most, abs(k))[1]
    return (low, high) if k >= 0 else reciprocal(low, high)


@inner
def _raised(x: float, k: int) -> Interval:
    """The power of one float, enclosed, by k - 1 multiplications: k is at most 16."""
    low, high = 1.0, 1.0
    for _ in range(k):
        low, high = multiply(low, high, x, x)
    return low, high


@inner
def hull(a: float, b: float, c: float, d: float) -> Interval:
    """Return the smallest interval that holds both."""
    if undefined(a, b) or undefined(c, d):
        return math.nan, math.nan
    return min(a, c), max(b, d)


@inner
def minimum(a: float, b: float, c: float, d: float) -> Interval:
    """min([a, b], [c, d])."""
    if undefined(a, b) or undefined(c, d):
        return math.nan, math.nan
    return min(a, c), min(b, d)


@inner
def maximum(a: float, b: float, c: float, d: float) -> Interval:
    """max([a, b], [c, d])."""
    if undefined(a, b) or undefined(c, d):
        return math.nan, math.nan
    return max(a, c), max(b, d)


@inner
def absolute(a: float, b: float) -> Interval:
    """The absolute value of [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    return (0.0 if a <= 0.0 <= b else min(abs(a), abs(b))), max(abs(a), abs(b))
