"""The natural logarithm, and the split x = 2^k m that it shares with powers.

Method: log m = 2 artanh s with s = (m - 1)/(m + 1), as a polynomial in s².
"""

import math

from roa.kernel.vector_math.exponential import LN2_HIGH, LN2_LOW
from roa.kernel.vector_math.floats import COUNTER, COUNTER_BITS, bits_of, float_of, packed

ROOT_HALF_BITS = 0x3FE6A09E667F3BCD
ONE_BITS = 0x3FF0000000000000
FRACTION_BITS = 0x000FFFFFFFFFFFFF
SMALLEST_NORMAL = 2.2250738585072014e-308


@packed
def exponent_and_fraction(x):
    """Return (k, m) with x = 2^k m and m in [√½, √2), both floats; x positive and finite."""
    subnormal = x < SMALLEST_NORMAL
    normal = x * 18014398509481984.0 if subnormal else x  # 2^54
    # Counted from √½ on, so that the exponent changes there and not at the powers of two.
    shifted = bits_of(normal) + (ONE_BITS - ROOT_HALF_BITS)
    k = float_of((shifted >> 52) | COUNTER_BITS) - (COUNTER + 1023.0)
    k = k - 54.0 if subnormal else k
    return k, float_of((shifted & FRACTION_BITS) + ROOT_HALF_BITS)


@packed
def vlog(x):
    """log x; NaN below zero."""
    k, m = exponent_and_fraction(x)
    f = m - 1.0
    s = f / (m + 1.0)
    z = s * s
    p = 0.14616449685043406 * z + 0.15331721600556042
    p = p * z + 0.18182889125261723
    p = p * z + 0.2222221113479508
    p = p * z + 0.28571428625975487
    p = p * z + 0.39999999999899505
    p = p * z + 0.666666666666667
    # 2s = f - s f and s f = f²/2 - s f²/2: written so, the largest term is exact and the next is small.
    square = 0.5 * f * f
    value = k * LN2_HIGH + (f - (square - (s * (square + z * p) + k * LN2_LOW)))
    value = value if x < math.inf else x
    value = value if x > 0.0 else math.nan
    return -math.inf if x == 0.0 else value
