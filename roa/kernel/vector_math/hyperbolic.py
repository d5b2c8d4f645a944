"""sinh, cosh and tanh from the exponential, and odd polynomials near zero."""

import math

from roa.kernel.vector_math.exponential import EXP_HIGHEST, scaled_exp
from roa.kernel.vector_math.floats import packed


@packed
def half_exp(size):
    """Return e^size / 2 for size ≥ 0, which is finite a little longer than e^size."""
    return scaled_exp(EXP_HIGHEST if size > EXP_HIGHEST else size, 0.0, -1.0)


@packed
def vsinh(x):
    """sinh x."""
    size = abs(x)
    half = half_exp(size)
    z = size * size
    p = 2.8445264169895285e-15 * z + 7.646625361656657e-13
    p = p * z + 1.6059048396350562e-10
    p = p * z + 2.505210836405804e-08
    p = p * z + 2.755731922404034e-06
    p = p * z + 0.00019841269841269773
    p = p * z + 0.008333333333333333
    p = p * z + 0.16666666666666666
    value = size + size * (z * p) if size < 1.0 else half - 0.25 / half
    return math.copysign(value, x)


@packed
def vcosh(x):
    """cosh x."""
    half = half_exp(abs(x))
    return half + 0.25 / half


@packed
def vtanh(x):
    """tanh x."""
    size = abs(x)
    # Beyond 20 the result is 1 in floats.
    twice = 2.0 * (20.0 if size > 20.0 else size)
    far = 1.0 - 2.0 / (scaled_exp(twice, 0.0, 0.0) + 1.0)
    z = size * size
    p = -2.060276537636634e-05 * z + 8.511313685577672e-05
    p = p * z - 0.0002346347410887237
    p = p * z + 0.0005889360520074057
    p = p * z - 0.001455661830100716
    p = p * z + 0.003592110378689024
    p = p * z - 0.008863234397814355
    p = p * z + 0.021869488493666944
    p = p * z - 0.053968253967434016
    p = p * z + 0.13333333333332714
    p = p * z - 0.3333333333333333
    value = size + size * (z * p) if size < 0.55 else far
    return math.copysign(value, x)
