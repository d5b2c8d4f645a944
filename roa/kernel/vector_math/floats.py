"""The bits of floats, and what stands in for conversions between integers and floats."""

import numpy as np
from numba import njit

FLAGS = {"contract"}
packed = njit(fastmath=FLAGS, error_model="numpy", forceinline=True)

# Adding and subtracting 1.5·2^52 rounds to the nearest integer, and leaves it in the low bits.
ROUNDER = 6755399441055744.0
# 2^52: with a non-negative integer in its low bits, subtracting it gives that integer as a float.
COUNTER = 4503599627370496.0
COUNTER_BITS = 0x4330000000000000


@packed
def bits_of(x):
    """Return the bits of a float as an integer."""
    return np.float64(x).view(np.int64)


@packed
def float_of(bits):
    """Return the float that has these bits."""
    return np.int64(bits).view(np.float64)


@packed
def power_of_two(k):
    """Return 2^k for a whole float k in [-1022, 1023]."""
    return float_of(bits_of(k + 1023.0 + ROUNDER) << 52)


@packed
def head(x):
    """Return the leading 26 bits of x: the product of two heads is exact."""
    return float_of(bits_of(x) & -0x8000000)
