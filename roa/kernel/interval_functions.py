"""Interval versions of the functions of the formula language, on pairs (low, high) as in `intervals`.

The mathematics library is trusted to a few units in the last place only: monotone functions are taken
at the two ends and widened by 16 of them, sine and cosine by 4e-16 (they stay below 1, and the
library's own error is below one unit at any argument). Results are cut back to what is known for
certain, such as |sin x| <= |x|, so that an equilibrium at zero stays exactly there.
"""

from __future__ import annotations

import math

from roa.kernel.intervals import LARGEST, Interval, absolute, add, down, power, reciprocal, square, undefined, up
from roa.kernel.machine_code import inner

LIBRARY = 3.6e-15  # 16 units in the last place, relative
TRIGONOMETRIC = 4e-16  # absolute, for sine and cosine
PERIOD = 2.0 * math.pi
LARGEST_ANGLE = 1e8  # beyond it, periods are no longer told apart safely: the whole range is returned


@inner
def _below(r: float) -> float:
    if r == math.inf:
        return LARGEST
    return r if r == -math.inf else r - (abs(r) * LIBRARY + 1e-300)


@inner
def _above(r: float) -> float:
    return -_below(-r)


@inner
def _holds(a: float, b: float, offset: float, period: float) -> bool:
    """Say whether some offset + k period may lie in [a, b]; in doubt it does."""
    first, last = (a - offset) / period, (b - offset) / period
    return math.ceil(first - 1e-9 - abs(first) * 1e-15) <= math.floor(last + 1e-9 + abs(last) * 1e-15)


@inner
def sine(a: float, b: float) -> Interval:
    """sin [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    low, high = -1.0, 1.0
    if max(abs(a), abs(b)) < LARGEST_ANGLE:
        p, q = math.sin(a), math.sin(b)
        if not _holds(a, b, -0.5 * math.pi, PERIOD):
            low = max(low, min(p, q) - TRIGONOMETRIC)
        if not _holds(a, b, 0.5 * math.pi, PERIOD):
            high = min(high, max(p, q) + TRIGONOMETRIC)
    # sin x <= x for x >= 0, and sin x <= 0 on [-3, 0]; the mirror image for the lower end.
    if b >= 0.0 and a >= -3.0:
        high = min(high, b)
    if a <= 0.0 and b <= 3.0:
        low = max(low, a)
    return low, high


@inner
def cosine(a: float, b: float) -> Interval:
    """cos [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    low, high = -1.0, 1.0
    if max(abs(a), abs(b)) < LARGEST_ANGLE:
        p, q = math.cos(a), math.cos(b)
        if not _holds(a, b, math.pi, PERIOD):
            low = max(low, min(p, q) - TRIGONOMETRIC)
        if not _holds(a, b, 0.0, PERIOD):
            high = min(high, max(p, q) + TRIGONOMETRIC)
    return low, high


@inner
def tangent(a: float, b: float) -> Interval:
    """tan [a, b], undefined where the interval may hold a pole."""
    if undefined(a, b) or max(abs(a), abs(b)) >= LARGEST_ANGLE or _holds(a, b, 0.5 * math.pi, math.pi):
        return math.nan, math.nan
    return (_below(math.tan(a)) if a != 0.0 else 0.0), (_above(math.tan(b)) if b != 0.0 else 0.0)


@inner
def exponential(a: float, b: float) -> Interval:
    """exp [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    return max(_below(math.exp(a)), 0.0), _above(math.exp(b))


@inner
def logarithm(a: float, b: float) -> Interval:
    """log [a, b], undefined where the interval holds zero or less."""
    if not a > 0.0 or math.isnan(b):
        return math.nan, math.nan
    return _below(math.log(a)), _above(math.log(b))


@inner
def root(a: float, b: float) -> Interval:
    """sqrt [a, b], undefined where the interval holds less than zero."""
    if not a >= 0.0 or math.isnan(b):
        return math.nan, math.nan
    return max(down(math.sqrt(a)), 0.0), (up(math.sqrt(b)) if b > 0.0 else 0.0)


@inner
def arc_sine(a: float, b: float) -> Interval:
    """asin [a, b], undefined where the interval leaves [-1, 1]."""
    if not (a >= -1.0 and b <= 1.0):
        return math.nan, math.nan
    return (_below(math.asin(a)) if a != 0.0 else 0.0), (_above(math.asin(b)) if b != 0.0 else 0.0)


@inner
def arc_cosine(a: float, b: float) -> Interval:
    """acos [a, b], undefined where the interval leaves [-1, 1]."""
    if not (a >= -1.0 and b <= 1.0):
        return math.nan, math.nan
    return max(_below(math.acos(b)), 0.0), _above(math.acos(a))


@inner
def arc_tangent(a: float, b: float) -> Interval:
    """atan [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    return (_below(math.atan(a)) if a != 0.0 else 0.0), (_above(math.atan(b)) if b != 0.0 else 0.0)


@inner
def arc_tangent_jumps(a: float, b: float, c: float, d: float) -> bool:
    """Say whether y in [a, b] and x in [c, d] meet the half-line x <= 0, y = 0 on which atan2(y, x) jumps."""
    return a <= 0.0 <= b and c <= 0.0


@inner
def arc_tangent_of_two(a: float, b: float, c: float, d: float) -> Interval:
    """atan2(y, x) for y in [a, b] and x in [c, d]; the whole range where it jumps."""
    if undefined(a, b) or undefined(c, d):
        return math.nan, math.nan
    if arc_tangent_jumps(a, b, c, d):
        return _below(-math.pi), _above(math.pi)
    # Away from the jump the angle is monotone along every edge, so its extremes are at corners.
    p, q, r, s = math.atan2(a, c), math.atan2(a, d), math.atan2(b, c), math.atan2(b, d)
    return _below(min(min(p, q), min(r, s))), _above(max(max(p, q), max(r, s)))


@inner
def hyperbolic_sine(a: float, b: float) -> Interval:
    """sinh [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    return (_below(math.sinh(a)) if a != 0.0 else 0.0), (_above(math.sinh(b)) if b != 0.0 else 0.0)


@inner
def hyperbolic_cosine(a: float, b: float) -> Interval:
    """cosh [a, b]."""
    near, far = absolute(a, b)
    if undefined(near, far):
        return math.nan, math.nan
    return max(_below(math.cosh(near)), 1.0), _above(math.cosh(far))


@inner
def hyperbolic_tangent(a: float, b: float) -> Interval:
    """tanh [a, b]."""
    if undefined(a, b):
        return math.nan, math.nan
    low = max(_below(math.tanh(a)), -1.0) if a != 0.0 else 0.0
    high = min(_above(math.tanh(b)), 1.0) if b != 0.0 else 0.0
    return low, high


@inner
def sign(a: float, b: float) -> Interval:
    """Return the sign of [a, b], with sign(0) = 0."""
    if undefined(a, b):
        return math.nan, math.nan
    return (1.0 if a > 0.0 else 0.0 if a == 0.0 else -1.0), (-1.0 if b < 0.0 else 0.0 if b == 0.0 else 1.0)


@inner
def real_power(a: float, b: float, p: float, q: float) -> Interval:
    """[a, b]^e for a real exponent e in [p, q]; undefined where the interval holds less than zero.

    At zero the power is taken as its limit, infinite where e < 0: the caller decides whether the limit is
    a value. The power is monotone in both arguments, so the corners hold its extremes.
    """
    if not a >= 0.0 or math.isnan(b) or undefined(p, q):
        return math.nan, math.nan
    if a == 0.0 and b == 0.0:
        return (0.0, 0.0) if p > 0.0 else (0.0, math.inf)
    low = min(_limit(a, p), _limit(a, q))
    low = min(low, min(_limit(b, p), _limit(b, q)))
    high = max(_limit(a, p), _limit(a, q))
    high = max(high, max(_limit(b, p), _limit(b, q)))
    return max(_below(low), 0.0), _above(high)


@inner
def _limit(x: float, e: float) -> float:
    if x == 0.0:
        return 0.0 if e > 0.0 else math.inf
    return math.pow(x, e)


@inner
def one_minus_square(a: float, b: float) -> Interval:
    """1 - [a, b]^2, not below zero where the interval lies in [-1, 1]."""
    low, high = square(a, b)
    low, high = add(1.0, 1.0, -high, -low)
    return (max(low, 0.0), high) if a >= -1.0 and b <= 1.0 else (low, high)


@inner
def inverse_root_power(a: float, b: float, k: int) -> Interval:
    """[a, b]^(-k/2) for an odd k >= 1 and a >= 0, unbounded where the interval holds zero."""
    low, high = root(a, b)
    if low > 0.0:
        low, high = power(low, high, k)
        return reciprocal(low, high)
    if high > 0.0:
        far = power(high, high, k)[1]
        return reciprocal(far, far)[0], math.inf
    return (0.0, math.inf) if high == 0.0 else (math.nan, math.nan)
