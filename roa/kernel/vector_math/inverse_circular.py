"""asin, acos, atan and atan2.

Method: atan q for q in [0, 1] by a polynomial to 1/2 and by atan q = π/4 + atan((q - 1)/(q + 1))
above; what is left of the circle is a multiple of π/4. asin by a polynomial to 1/2 and by
asin x = π/2 - 2 asin √((1 - x)/2) above.
"""

import math

from roa.kernel.vector_math.floats import packed

# π/4 in 50 bits, so that its multiples up to 4 are exact, and the rest.
QUARTER_PI = float.fromhex("0x1.921fb54442d18p-1")
QUARTER_PI_REST = float.fromhex("0x1.1a62633145c07p-55")
HALF_PI = 2.0 * QUARTER_PI
HALF_PI_REST = 2.0 * QUARTER_PI_REST
PI = 4.0 * QUARTER_PI
PI_REST = 4.0 * QUARTER_PI_REST


@packed
def angle(opposite, adjacent, mirrored):
    """Return the angle of (adjacent, opposite), both ≥ 0 and at most 1e300, taken from π if mirrored."""
    steep = opposite > adjacent
    long = opposite if steep else adjacent
    short = adjacent if steep else opposite
    turned = short > 0.5 * long
    below = short + long if turned else long
    q = (short - long if turned else short) / (below if below != 0.0 else 1.0)
    z = q * q
    p = -0.009215792047089858 * z + 0.025006503566489507
    p = p * z - 0.03806653672057366
    p = p * z + 0.04628024868570153
    p = p * z - 0.05240099507994713
    p = p * z + 0.05879578429582425
    p = p * z - 0.06666435677235948
    p = p * z + 0.07692294712540285
    p = p * z - 0.09090908620322523
    p = p * z + 0.11111111100917376
    p = p * z - 0.14285714285599188
    p = p * z + 0.19999999999999488
    p = p * z - 0.3333333333333333
    small = q + q * (z * p)
    # The octants: π/4 times a whole number, and the small angle forwards or backwards.
    eighths = 1.0 if turned else 0.0
    eighths = 2.0 - eighths if steep else eighths
    eighths = 4.0 - eighths if mirrored else eighths
    small = -small if steep != mirrored else small
    return eighths * QUARTER_PI + (small + eighths * QUARTER_PI_REST)


@packed
def vatan(x):
    """atan x, in rad."""
    size = abs(x)
    return math.copysign(angle(1.0e300 if size > 1.0e300 else size, 1.0, False), x)


@packed
def vatan2(y, x):
    """The angle of the point (x, y), in rad; the signs of zeros tell the sides."""
    # Infinities become sides of 1 or 0, and lengths whose sum is no float a quarter of themselves.
    opposite = abs(y)
    adjacent = abs(x)
    far = (opposite > 1.0e300) | (adjacent > 1.0e300)
    infinite = (opposite == math.inf) | (adjacent == math.inf)
    up = 0.25 * opposite if far else opposite
    across = 0.25 * adjacent if far else adjacent
    up = (1.0 if opposite == math.inf else 0.0) if infinite else up
    across = (1.0 if adjacent == math.inf else 0.0) if infinite else across
    value = math.copysign(angle(up, across, math.copysign(1.0, x) < 0.0), y)
    return value if (x == x) & (y == y) else math.nan


@packed
def asin_parts(size):
    """Return (s, rest) with asin s = s + rest, s = size to 1/2 and √((1 - size)/2) above."""
    outer = size > 0.5
    halved = 0.5 * (1.0 - size)
    s = math.sqrt(halved) if outer else size
    z = halved if outer else size * size
    p = 0.028757851367421566 * z - 0.014851887071247204
    p = p * z + 0.01740087944269402
    p = p * z + 0.005457506718640358
    p = p * z + 0.01032281435018578
    p = p * z + 0.011479177415184906
    p = p * z + 0.013971212973552933
    p = p * z + 0.017352392720869973
    p = p * z + 0.02237217294214989
    p = p * z + 0.030381944138531247
    p = p * z + 0.04464285714635543
    p = p * z + 0.07499999999998433
    p = p * z + 0.16666666666666669
    return s, s * (z * p)


@packed
def vasin(x):
    """asin x, in rad; NaN outside [-1, 1]."""
    size = abs(x)
    s, rest = asin_parts(size)
    outer = (HALF_PI - 2.0 * s) + (HALF_PI_REST - 2.0 * rest)
    return math.copysign(outer if size > 0.5 else s + rest, x)


@packed
def vacos(x):
    """acos x, in rad; NaN outside [-1, 1]."""
    size = abs(x)
    s, rest = asin_parts(size)
    twice = 2.0 * (s + rest)
    outer = twice if x > 0.0 else (PI - 2.0 * s) + (PI_REST - 2.0 * rest)
    signed = math.copysign(s, x)
    inner = HALF_PI - (signed - (HALF_PI_REST - math.copysign(rest, x)))
    return outer if size > 0.5 else inner
