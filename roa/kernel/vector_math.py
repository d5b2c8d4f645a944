"""Circular functions as straight-line arithmetic, which the compiler packs into vectors.

`math.sin` inside a lane loop is a call for every lane, and the loop loses its vectors without a
word (five to six times slower). This file is not imported by generated code: its text is placed in
every generated module, since numba's cache does not see changes in another file.

Method: reduction by multiples of π/2 after Cody and Waite (Software Manual for the Elementary
Functions, 1980), with π/2 in parts of 33, 33 and 53 bits so that the products with fewer than 20
bits are exact; then minimax polynomials of our own on [-π/4, π/4]. Beyond `REDUCIBLE` the answer
is NaN, which the step control turns into a *failed* trajectory: no state of a sane loop is there.

Floating-point flags: `contract` alone. Re-association would undo the reduction.
"""

import math

import numpy as np
from numba import njit

FLAGS = {"contract"}

TWO_OVER_PI = 0.6366197723675814
HALF_PI_HIGH = float.fromhex("0x1.921fb54400000p+0")
HALF_PI_MIDDLE = float.fromhex("0x1.0b4611a600000p-34")
HALF_PI_LOW = float.fromhex("0x1.3198a2e037073p-69")
# Adding and subtracting 1.5·2^52 rounds to the nearest integer, and leaves it in the low bits.
ROUNDER = 6755399441055744.0
REDUCIBLE = 1.0e6


@njit(fastmath=FLAGS, error_model="numpy", forceinline=True)
def sin_cos_quarter(x):
    """Return (k mod 4, sin r, cos r) with x = k π/2 + r and |r| ≤ π/4."""
    shifted = x * TWO_OVER_PI + ROUNDER
    k = shifted - ROUNDER
    r = x - k * HALF_PI_HIGH
    r = r - k * HALF_PI_MIDDLE
    r = r - k * HALF_PI_LOW
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
    # 1 - u/2 loses the bits that `lost` gives back.
    half = 0.5 * u
    rounded = 1.0 - half
    lost = (1.0 - rounded) - half
    cosine = rounded + (u * u * c + lost)
    quarter = np.float64(shifted).view(np.int64) & 3
    return quarter, sine, cosine


@njit(fastmath=FLAGS, error_model="numpy", forceinline=True)
def vsin(x):
    """sin x, x in rad; NaN beyond REDUCIBLE."""
    quarter, sine, cosine = sin_cos_quarter(x)
    value = cosine if (quarter & 1) != 0 else sine
    value = -value if (quarter & 2) != 0 else value
    return value if abs(x) <= REDUCIBLE else math.nan


@njit(fastmath=FLAGS, error_model="numpy", forceinline=True)
def vcos(x):
    """cos x, x in rad; NaN beyond REDUCIBLE."""
    quarter, sine, cosine = sin_cos_quarter(x)
    value = sine if (quarter & 1) != 0 else cosine
    value = -value if ((quarter + 1) & 2) != 0 else value
    return value if abs(x) <= REDUCIBLE else math.nan


@njit(fastmath=FLAGS, error_model="numpy", forceinline=True)
def vtan(x):
    """tan x, x in rad; NaN beyond REDUCIBLE."""
    return vsin(x) / vcos(x)
