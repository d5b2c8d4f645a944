"""Powers with a constant real exponent.

Method: e^(y log x) with log x in two floats to about 2^-64, since the exponential turns an absolute
error of its argument, which reaches 745, into a relative one of its value. Leading parts are cut to
26 bits (`head`), so that their products are exact with and without fused arithmetic.
"""

import math

from roa.kernel.vector_math.exponential import EXP_HIGHEST, EXP_LOWEST, LN2_HIGH, LN2_LOW, scaled_exp
from roa.kernel.vector_math.floats import head, packed
from roa.kernel.vector_math.logarithm import exponent_and_fraction

THIRD = 0.3333333333333333
THIRD_REST = 1.850371707708594e-17


@packed
def log_in_two_parts(x):
    """Return (high, low) with log x = high + low and high cut to 26 bits; x positive and finite."""
    k, m = exponent_and_fraction(x)
    f = m - 1.0
    g = m + 1.0
    g_high = head(g)
    g_low = m - (g_high - 1.0)
    inverse = 1.0 / g
    s = head(f * inverse)
    s_low = ((f - s * g_high) - s * g_low) * inverse
    # z = s² as z_high + z_low.
    square = s * s
    z_high = head(square)
    z_low = (square - z_high) + s_low * (2.0 * s + s_low)
    z = z_high + z_low
    q = 0.058615255140488765 * z + 0.05853124270461193
    q = q * z + 0.06667402119112673
    q = q * z + 0.07692297485447729
    q = q * z + 0.09090909167657202
    q = q * z + 0.11111111110828116
    q = q * z + 0.14285714285714682
    q = q * z + 0.2
    # artanh s = s (1 + z p) with p = 1/3 + z q, t = z p and v = s t, each in two parts.
    rest = z * q
    p_high = head(THIRD + rest)
    p_low = (THIRD - p_high) + (rest + THIRD_REST)
    product = z_high * p_high
    t_high = head(product)
    t_low = (product - t_high) + (z_high * p_low + z_low * (p_high + p_low))
    v = s * t_high
    v_low = s * t_low + s_low * (t_high + t_low)
    # k log 2 + 2s + 2v, from the largest on.
    multiple = k * LN2_HIGH
    first = multiple + 2.0 * s
    first_low = (multiple - first) + 2.0 * s
    total = first + 2.0 * v
    total_low = (first - total) + 2.0 * v
    low = total_low + (first_low + (2.0 * (s_low + v_low) + k * LN2_LOW))
    high = head(total)
    return high, low + (total - high)


@packed
def vpower(x, y):
    """x^y for a finite y that is no whole number; NaN below zero."""
    high, low = log_in_two_parts(x)
    y_high = head(y)
    whole = high * y_high
    part = high * (y - y_high) + low * y
    beyond = (whole + part > EXP_HIGHEST) | (whole + part < EXP_LOWEST)
    limit = EXP_HIGHEST if whole > 0.0 else EXP_LOWEST
    value = scaled_exp(limit if beyond else whole, 0.0 if beyond else part, 0.0)
    value = value if x < math.inf else (math.inf if y > 0.0 else 0.0)
    value = value if x != 0.0 else (0.0 if y > 0.0 else math.inf)
    return value if x >= 0.0 else math.nan
