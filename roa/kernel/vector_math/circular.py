"""sin, cos and tan.

Method: reduction by multiples of π/2 after Cody and Waite (Software Manual for the Elementary
Functions, 1980), with π/2 in parts of 33, 33 and 53 bits so that the products with fewer than 20
bits are exact, and what the second subtraction loses given back in the third; then polynomials on
[-π/4, π/4]. Beyond `REDUCIBLE` the answer is NaN, which the step control turns into a *failed*
trajectory: no state of a sane loop is there. sin and cos of one angle share all but the last selects.
"""

import math

from roa.kernel.vector_math.floats import ROUNDER, bits_of, packed

TWO_OVER_PI = 0.6366197723675814
HALF_PI_HIGH = float.fromhex("0x1.921fb54400000p+0")
HALF_PI_MIDDLE = float.fromhex("0x1.0b4611a600000p-34")
HALF_PI_LOW = float.fromhex("0x1.3198a2e037073p-69")
REDUCIBLE = 1.0e6


@packed
def sin_cos_quarter(x):
    """Return (k + a multiple of 4, sin r, cos r) with x = k π/2 + r and |r| ≤ π/4."""
    shifted = x * TWO_OVER_PI + ROUNDER
    k = shifted - ROUNDER
    first = x - k * HALF_PI_HIGH  # exact
    second = first - k * HALF_PI_MIDDLE
    lost = (first - second) - k * HALF_PI_MIDDLE
    r = second - (k * HALF_PI_LOW - lost)
    u = r * r
    s = 1.5913920350003036e-10 * u - 2.5051072548500804e-08
    s = s * u + 2.755731581375289e-06
    s = s * u - 0.00019841269836193376
    s = s * u + 0.00833333333333057
    s = s * u - 0.16666666666666663
    sine = r + r * (u * s)
    c = -1.1379999309037171e-11 * u + 2.0876109172764453e-09
    c = c * u - 2.755731709105963e-07
    c = c * u + 2.480158729841211e-05
    c = c * u - 0.001388888888888716
    c = c * u + 0.041666666666666664
    # 1 - u/2 loses bits too, which are given back.
    half = 0.5 * u
    rounded = 1.0 - half
    cosine = rounded + (u * u * c + ((1.0 - rounded) - half))
    return bits_of(shifted), sine, cosine


@packed
def vsin(x):
    """sin x, x in rad; NaN beyond REDUCIBLE."""
    quarter, sine, cosine = sin_cos_quarter(x)
    value = cosine if (quarter & 1) != 0 else sine
    value = -value if (quarter & 2) != 0 else value
    value = value if abs(x) > 1e-8 else x
    return value if abs(x) <= REDUCIBLE else math.nan


@packed
def vcos(x):
    """cos x, x in rad; NaN beyond REDUCIBLE."""
    quarter, sine, cosine = sin_cos_quarter(x)
    value = sine if (quarter & 1) != 0 else cosine
    value = -value if ((quarter + 1) & 2) != 0 else value
    return value if abs(x) <= REDUCIBLE else math.nan


@packed
def vtan(x):
    """tan x, x in rad; NaN beyond REDUCIBLE."""
    quarter, sine, cosine = sin_cos_quarter(x)
    odd = (quarter & 1) != 0
    value = (-cosine if odd else sine) / (sine if odd else cosine)
    value = value if abs(x) > 1e-8 else x
    return value if abs(x) <= REDUCIBLE else math.nan
