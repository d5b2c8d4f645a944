"""exp, and the reduced exponential that hyperbolic functions and powers share.

Method: e^x = 2^k e^r with |r| ≤ log(2)/2, k log 2 in two parts so that the first product is exact,
and a polynomial for e^r.
"""

from roa.kernel.vector_math.floats import ROUNDER, packed, power_of_two

LOG2_E = 1.4426950408889634
# log 2 in 42 bits and the rest: k has 11, so that k·LN2_HIGH is exact.
LN2_HIGH = float.fromhex("0x1.62e42fefa3800p-1")
LN2_LOW = float.fromhex("0x1.ef35793c76730p-45")
# Beyond these the result is an infinity or zero, which the scaling by 2^k gives of itself.
EXP_HIGHEST = 712.0
EXP_LOWEST = -746.0


@packed
def scaled_exp(whole, part, extra):
    """Return 2^extra e^(whole + part) for |part| much below 1, whole within the limits above."""
    k = (whole + part) * LOG2_E + ROUNDER - ROUNDER
    r = (whole - k * LN2_HIGH) + (part - k * LN2_LOW)
    p = 2.510038549551032e-08 * r + 2.7620088445409746e-07
    p = p * r + 2.7557268459997064e-06
    p = p * r + 2.4801521295954376e-05
    p = p * r + 0.00019841269863053618
    p = p * r + 0.0013888888917213717
    p = p * r + 0.008333333333330062
    p = p * r + 0.04166666666662413
    p = p * r + 0.16666666666666669
    p = p * r + 0.5000000000000001
    value = 1.0 + (r + r * r * p)
    # In two factors, since 2^k alone leaves the floats before the product does; the first is exact.
    k = k + extra
    half = k * 0.5 + ROUNDER - ROUNDER
    return value * power_of_two(half) * power_of_two(k - half)


@packed
def vexp(x):
    """e^x."""
    x = EXP_HIGHEST if x > EXP_HIGHEST else x
    x = EXP_LOWEST if x < EXP_LOWEST else x
    return scaled_exp(x, 0.0, 0.0)
